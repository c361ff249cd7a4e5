"""What a lab made of readings that came late: bit for bit, by episode and by call; and what the pure fold makes of them."""

import io
from collections.abc import Sequence
from datetime import UTC, datetime
from typing import Any

import httpx
import numpy as np
import psycopg
import pyarrow.parquet as pq

from analysis.judge.fold import episodes_of, fold, start_state
from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import seconds_of
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from tests.faults.bench import Tap, Visitor
from tests.faults.course import ANGLE_LIMIT, ER_LIMIT
from tests.faults.figures import Balance, balance_of
from tests.faults.sender import HonestSender
from tests.running_lab import RunningLab


def let_limits_hold_since(lab: RunningLab, taps: Sequence[Tap], since_us: int) -> None:
    """As if the limits had been set then: the past is made by the data's clock here, and nobody waits for it."""
    with psycopg.connect(lab.services["database_url"]) as database:
        changed = database.execute(
            "UPDATE labmon_limitversion SET valid_from = %s WHERE limit_id IN (SELECT id FROM labmon_limit "
            "WHERE experiment_id = ANY(%s))", [datetime.fromtimestamp(since_us / 1e6, UTC), [tap.experiment for tap in taps]])
        assert changed.rowcount == len(taps)


def stored_rows(visitor: Visitor, tap: Tap, from_us: int, until_us: int, columns: Sequence[str]) -> list[tuple[Any, ...]]:
    """(boot, sequence, µs, bits of each raw column) of every stored reading of the span, by the API's Parquet."""
    span = "/".join(datetime.fromtimestamp(at_us / 1e6, UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ") for at_us in (from_us, until_us))
    answer = httpx.get(f"http://127.0.0.1:{visitor.lab.port}/api/v1/taps/{tap.path}/readings", timeout=180.0,
                       params={"span": span, "format": "parquet"}, headers={"Authorization": f"Bearer {visitor.key}"})
    assert answer.status_code == 200, answer.text[:500]
    table = pq.read_table(io.BytesIO(answer.content))
    named = [next(name for name in table.column_names if name == f"raw_{column}" or name.startswith(f"raw_{column}_")
                  and not name.endswith(("_min", "_max", "_sd"))) for column in columns]
    at_us = table["at"].cast("int64").to_pylist()
    bits = [np.asarray(table[name].to_numpy(), np.float64).view(np.int64).tolist() for name in named]
    return list(zip(table["boot"].to_pylist(), table["sequence"].to_pylist(), at_us, *bits, strict=True))


def sent_rows(sender: HonestSender) -> list[tuple[Any, ...]]:
    """What the sender made, in the same form."""
    course = sender.course
    bits = [np.asarray(values, np.float64).view(np.int64).tolist() for values in course.columns.values()]
    return list(zip([sender.boot] * len(course), range(len(course)), (sender.started_us + course.after_us).tolist(), *bits,
                    strict=True))


def balance(visitor: Visitor, tap: Tap, sender: HonestSender) -> Balance:
    """Everything that is stored of the tap within a day of its course, beside what the sender made."""
    day_us = 86_400_000_000
    from_us, until_us = sender.started_us - day_us, sender.started_us + int(sender.course.after_us[-1]) + day_us
    return balance_of(sent_rows(sender), stored_rows(visitor, tap, from_us, until_us, list(sender.course.columns)))


def balances(visitor: Visitor, taps: Sequence[Tap], senders: Sequence[HonestSender]) -> Balance:
    """The sum over several taps."""
    return sum((balance(visitor, tap, sender) for tap, sender in zip(taps, senders, strict=True)), Balance(0, 0, 0, 0, 0))


def episodes_by_fold(tap: Tap, interval_s: float) -> list[tuple[float, float | None, float | None]]:
    """(raised, alarm since, returned) of the tap's course, s from its start, by the pure functions in one piece."""
    is_two_port = "port1" in tap.course.columns
    kind, unit, limit = ("two-port", "mW", ER_LIMIT) if is_two_port else ("stokes", "uW", ANGLE_LIMIT)
    reduced = reduce_tap(kind, unit, tap.course.after_us, tap.course.columns, TapCalibration(wanted_state=[1.0, 0.0, 0.0]))
    quantity = Quantity(limit["quantity"])
    _, events = fold(LimitRule(**limit | {"quantity": quantity}), start_state(), seconds_of(reduced, quantity), interval_s)
    return [tuple(None if at_us is None else round(at_us / 1e6, 6) for at_us in (one.raised_us, one.alarm_us, one.returned_us))
            for one in episodes_of(events)]


def calls_of(lab: RunningLab, taps: Sequence[Tap]) -> list[tuple[str, str, bool]]:
    """(tap, kind of alarm, whether it was found late) of every call about the taps."""
    with psycopg.connect(lab.services["database_url"]) as database:
        return database.execute(
            "SELECT s.name || '/' || t.name, a.kind, a.is_late FROM labmon_message m JOIN labmon_alarm a "
            "ON a.event_id = m.event_id AND m.kind = 'call' JOIN ingest_tap t ON t.id = a.tap_id "
            "JOIN ingest_station s ON s.id = t.station_id WHERE s.name = ANY(%s)", [[tap.station for tap in taps]]).fetchall()


def episodes_of_span(lab: RunningLab, tap: Tap, sender: HonestSender) -> list[tuple[float, float | None, float | None]]:
    """As `episodes_by_fold`, of what the lab has, however many there are."""
    with psycopg.connect(lab.services["database_url"]) as database:
        rows = database.execute("SELECT raised_at, alarm_at, returned_at FROM labmon_alarm WHERE experiment_id = %s "
                                "AND kind = 'limit' AND NOT is_withdrawn ORDER BY raised_at", [tap.experiment]).fetchall()
    return [tuple(None if at is None else round(at.timestamp() - sender.started_us / 1e6, 6) for at in row) for row in rows]


def longest_wait_s(sender: HonestSender) -> float:
    """Longest time without an acknowledgement."""
    at_s = [began_s + took_s for began_s, took_s in sender.tally.acknowledged_s]
    return max(later - earlier for earlier, later in zip(at_s, at_s[1:], strict=False))
