"""A station's clock steps while it measures: each reading once, placed as the contract says, and nobody called for it."""

import time

import numpy as np
import psycopg
import pytest

from tests.faults.bench import await_all_sent, await_judged, make_taps
from tests.faults.course import stokes_course, two_port_course
from tests.faults.figures import balance_of, note_fault
from tests.faults.history import calls_of, sent_rows, stored_rows
from tests.faults.sender import HonestSender

pytestmark = pytest.mark.slow

GOOD = ((30.0, 24),)
HOUR_US = 3_600_000_000
#: (s from the start, what the station's clock is ahead from then on, s)
WITHIN = ((6.0, 30.0), (12.0, -30.0), (18.0, 0.0))
FORWARD = ((8.0, 3600.0), (16.0, 0.0))
BACK = ((8.0, -86_400.0), (16.0, -40.0))
#: Uptimes place a reading to the shortest way seen plus rounding to a millisecond.
PLACED_WITHIN_US = 500_000


class SteppingSender(HonestSender):
    """Stamps readings by a clock that steps, and says its uptime."""

    steps: tuple[tuple[float, float], ...] = ()

    def ahead_us(self, after_us):
        """What the clock is ahead at moments after the start, µs."""
        at_s, ahead_s = np.array([(0.0, 0.0), *self.steps]).T
        return (1e6 * ahead_s[np.searchsorted(at_s, np.asarray(after_us) / 1e6, side="right") - 1]).astype(np.int64)

    def own_us(self, numbers):
        """The readings' stamps."""
        after_us = self.course.after_us[numbers]
        return self.started_us + after_us + self.ahead_us(after_us)

    def _message(self, batch):
        message, now_us = super()._message(batch), time.time_ns() // 1000
        part = message["taps"][self.tap]
        part["at"] = self.own_us(batch).tolist()
        part["uptime_ms"] = (1000 + self.course.after_us[batch] // 1000).tolist()
        since_us = now_us - self.started_us
        return message | {"now": {"at": now_us + int(self.ahead_us([since_us])[0]), "uptime_ms": 1000 + since_us // 1000}}


@pytest.fixture(scope="module")
def stepped(lab, visitor):
    """Three pairs of stations whose clocks step, all at once."""
    made = {}
    for number, (name, steps) in enumerate((("within", WITHIN), ("forward", FORWARD), ("back", BACK))):
        made[name] = (make_taps(visitor, f"clock-{name}", (two_port_course(5, GOOD), stokes_course(6, GOOD))), steps, 50 + number)
    started_us = (time.time_ns() // 1_000_000_000 + 1) * 1_000_000
    senders = {}
    for name, (taps, steps, seed) in made.items():
        senders[name] = [SteppingSender(port=lab.port, key=tap.key, tap=tap.name, course=tap.course, started_us=started_us,
                                        seed=seed, lost_share=0.1, newest_share=0.1) for tap in taps]
        for sender in senders[name]:
            sender.steps = steps
            sender.start()
    for group in senders.values():
        await_all_sent(group, 60.0)
    await_judged(lab)
    return {name: (taps, senders[name]) for name, (taps, _, _) in made.items()}


def found_of(visitor, tap, sender):
    """(boot, sequence, µs, values …) of all that is stored, wherever it was placed."""
    from_us, until_us = sender.started_us - 48 * HOUR_US, sender.started_us + 48 * HOUR_US
    return stored_rows(visitor, tap, from_us, until_us, list(sender.course.columns))


def without_time(rows):
    return [(boot, sequence, *values) for boot, sequence, _, *values in rows]


@pytest.mark.parametrize("name", ["within", "forward", "back"])
def test_each_reading_once_where_the_contract_places_it(lab, visitor, stepped, name):
    taps, senders = stepped[name]
    total, worst_us = None, 0
    for tap, sender in zip(taps, senders, strict=True):
        found = found_of(visitor, tap, sender)
        balance = balance_of(without_time(sent_rows(sender)), without_time(found))
        total = balance if total is None else total + balance
        assert balance.is_exact
        placed_us = np.array([at_us for _, _, at_us, *_ in sorted(found, key=lambda row: row[1])])
        own_us, true_us = sender.own_us(np.arange(len(sender.course))), sender.started_us + sender.course.after_us
        if name == "within":
            assert placed_us.tolist() == own_us.tolist(), "a clock within 60 s is believed as it is"
        else:
            worst_us = max(worst_us, int(np.abs(placed_us - true_us).max()))
            assert worst_us < PLACED_WITHIN_US
    calls, faults = calls_of(lab, taps), clock_faults(lab, taps)
    placed = "at its own stamps" if name == "within" else f"by the server's clock, at most {worst_us / 1e3:.0f} ms off"
    note_fault(f"clock jumps, {name}", "; ".join(f"{ahead_s:+g} s at {at_s:g} s" for at_s, ahead_s in senders[0].steps), total,
               calls=len(calls), recovered="at once", also=f"placed {placed}; fault shown: {faults[0] or 'none'}")
    assert calls == []
    assert all(bool(fault) is (name != "within") for fault in faults)


def clock_faults(lab, taps):
    """What is said of each station's clock."""
    with psycopg.connect(lab.services["database_url"]) as database:
        return [row[0] for row in database.execute(
            "SELECT b.clock_fault FROM ingest_stationboot b JOIN ingest_station s ON s.id = b.station_id WHERE s.name = ANY(%s)",
            [[tap.station for tap in taps]])]
