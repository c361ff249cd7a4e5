"""Trusted share and time to the limit through the whole pipeline: live, in pieces, late and replayed give the same."""

from datetime import timedelta

import numpy as np
import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from ingest.times import at_of
from labmon.ahead.models import AheadDue, LimitOutlook
from labmon.alarms.models import Alarm
from labmon.experiments.actions import retire_limit, set_limit
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.derived import judge_derived
from labmon.pipeline.process import process_touched
from labmon.pipeline.rolling import roll_up_due
from labmon.tell.models import Message
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_tap, store_readings
from tests.labmon.pipeline.lab import ports_of

pytestmark = pytest.mark.django_db
S, MINUTE, HOUR = 1_000_000, 60, 3600


@pytest.fixture
def clock(monkeypatch):
    now = {"us": NOON_US}
    monkeypatch.setattr("django.utils.timezone.now", lambda: at_of(now["us"]))
    return lambda us: now.update(us=us)


def er_of(angle_deg):
    return -20 * np.log10(np.tan(np.radians(np.asarray(angle_deg)) / 2))


class Bench:
    """A tap read each 10 s from noon on, and an experiment with a limit at 20 dB (11.4°)."""

    def __init__(self, angle_deg, bad=()):
        self.tap = make_tap(interval_s=10.0)
        self.experiment = make_experiment(self.tap, owner=make_person(email="o@example.org"))
        self.at_us = NOON_US + np.arange(len(angle_deg)) * 10 * S
        ports = ports_of(er_of(angle_deg))
        for index in bad:
            ports["port1"][index] = -1.0  # no power: untrusted
        self.ports = ports
        self.host = set_limit(self.experiment, self.tap, "er_db", alarm=20.0, valid_from=NOON, by=None).limit

    def limit(self, quantity, **values):
        return set_limit(self.experiment, self.tap, quantity, **({"valid_from": NOON, "by": None} | values)).limit

    def send(self, index, clock, now_us=None):
        """Store readings as heard at their time (or all now), and do what the beat does."""
        index = np.asarray(index)
        at_us = self.at_us[index]
        arrival_us = at_us if now_us is None else np.full(len(at_us), now_us)
        store_readings(self.tap, at_us, arrival_us=arrival_us, sequence=index, boot="b",
                       **{name: values[index] for name, values in self.ports.items()})
        now_us = int(at_us.max()) + S if now_us is None else now_us
        clock(now_us)
        process_touched(now_us)
        roll_up_due(now_us)
        judge_derived(now_us)


def told(limit):
    """(raised, alarm, returned) of a limit's standing alarms, s from noon."""
    def seconds(at):
        return None if at is None else round(at.timestamp() - NOON_US / S)
    rows = Alarm.objects.filter(limit=limit, is_withdrawn=False).order_by("raised_at")
    return [(seconds(row.raised_at), seconds(row.alarm_at), seconds(row.returned_at)) for row in rows]


def ramp(hours=6.0, rest=1.0, per_hour=2.0):
    """Calm at 3°, then rising by ``per_hour`` degrees an hour, then calm again at 3° (readings each 10 s)."""
    count = int(hours * 360)
    rising = 3.0 + per_hour / 360 * np.arange(count)
    noise = np.random.default_rng(7).normal(0, 0.02, 2 * int(rest * 360) + count)
    return np.concatenate([np.full(int(rest * 360), 3.0), rising, np.full(int(rest * 360), 3.0)]) + noise


def bad_share():
    """6 h at 5°, untrusted for 3 of each 10 minutes in the third hour."""
    seconds = np.arange(6 * 360)
    minute = seconds // 6
    return np.full(len(seconds), 5.0), np.flatnonzero((minute >= 120) & (minute < 180) & (minute % 10 < 3))


SHARE = {"alarm": 0.8, "on_delay_s": 60, "off_delay_s": 300, "window_s": 600}
AHEAD = {"alarm": 3600.0, "warning": 7200.0, "on_delay_s": 600, "off_delay_s": 900, "deadband": 1800.0}


def test_trusted_share_is_raised_and_returns(clock):
    angle, bad = bad_share()
    bench = Bench(angle, bad)
    limit = bench.limit("trusted_share", **SHARE)
    for hour in range(6):
        bench.send(np.arange(hour * 360, (hour + 1) * 360), clock)
    # Two of ten bad minutes leave 0.8, which is not below; the third is, at 123 min, and a minute later it is called. The last
    # three bad ones (170 to 172 min) leave the window one by one; 0.82 is passed with the second, and held for five minutes.
    [(raised, alarm, returned)] = told(limit)
    assert raised == alarm == 124 * MINUTE - 1 and returned == 187 * MINUTE - 1


@pytest.mark.parametrize("case", ["share", "ahead"])
def test_live_pieces_late_and_replay_agree(clock, case):
    """The same readings minute by minute, in random pieces with one part late, and all at once."""
    def made():
        if case == "share":
            angle, bad = bad_share()
            bench = Bench(angle, bad)
            return bench, bench.limit("trusted_share", **SHARE)
        bench = Bench(ramp())
        return bench, bench.limit("time_to_limit_s", **AHEAD)

    rng = np.random.default_rng(3)
    whole, limit_whole = made()
    end_us = int(whole.at_us[-1]) + HOUR * S
    whole.send(np.arange(len(whole.at_us)), clock, now_us=end_us)
    pieces, limit_pieces = made()
    for part in np.array_split(np.arange(len(pieces.at_us)), 23):
        pieces.send(part, clock)
    late, limit_late = made()
    cuts = np.sort(rng.choice(np.arange(10, len(late.at_us) - 10), 6, replace=False))
    parts = np.split(np.arange(len(late.at_us)), cuts)
    held = parts.pop(3)
    for part in parts:
        late.send(part, clock)
    late.send(held, clock, now_us=end_us)
    assert told(limit_whole) == told(limit_pieces) == told(limit_late) != []
    assert not AheadDue.objects.exists()


def test_a_warning_ahead_states_the_time_before_the_limit_and_is_withdrawn(clock):
    bench = Bench(ramp())
    limit = bench.limit("time_to_limit_s", **AHEAD)
    for part in np.array_split(np.arange(len(bench.at_us)), 8 * 12):
        bench.send(part, clock)
    [alarm] = Alarm.objects.filter(limit=limit)
    passed = Alarm.objects.get(limit=bench.host)
    lead = (passed.raised_at - alarm.raised_at) / timedelta(hours=1)
    assert 1.0 < lead < 2.1 and alarm.returned_at is not None and alarm.returned_at > passed.returned_at
    assert "recent drift reaches the limit in about" in alarm.message and "left" in alarm.message
    mails = list(Message.objects.filter(subject__contains="recent drift").order_by("pk"))
    assert 1 <= len(mails) <= 2  # the warning, and its rise to an alarm: each once


def test_drift_of_two_degrees_an_hour_with_four_left_says_two_hours(clock):
    """The worked case of the wish list: 4° left at 2° an hour is 2 h."""
    limit_deg = 11.421186
    rising = 2.0 / 360 * np.arange(int(3.5 * 360))
    bench = Bench(np.maximum(limit_deg - 4.0 - rising[-1] + rising, 0.4))
    bench.send(np.arange(len(rising)), clock)
    outlook = LimitOutlook.objects.get(limit=bench.host)
    last_us = int(bench.at_us[-1])
    assert outlook.said == "within" and outlook.limit_deg == pytest.approx(limit_deg)
    assert (outlook.at_us - last_us) / S + outlook.median_s == pytest.approx(7200, rel=0.02)
    assert outlook.tenth_s < outlook.median_s


def test_calm_light_has_no_time_to_its_limit(clock):
    bench = Bench(5.0 + np.random.default_rng(2).normal(0, 0.1, 4 * 360))
    limit = bench.limit("time_to_limit_s", **AHEAD)
    bench.send(np.arange(4 * 360), clock)
    outlook = LimitOutlook.objects.get(limit=bench.host)
    assert (outlook.said, outlook.median_s, outlook.turns_back) == ("not-within", None, True) and told(limit) == []


def test_a_silence_as_long_as_the_window_starts_the_share_anew(clock):
    bench = Bench(np.full(6 * 360, 5.0))
    limit = bench.limit("trusted_share", **SHARE)
    bench.send(np.r_[0:720, 1080:2160], clock)
    assert told(limit) == []


def test_a_retired_limit_returns(clock):
    angle, _ = bad_share()
    bench = Bench(angle, np.arange(360, 720))
    limit = bench.limit("trusted_share", **SHARE)
    bench.send(np.arange(0, 700), clock)
    assert told(limit)[0][2] is None
    retire_limit(limit, by=None)
    bench.send(np.arange(700, 760), clock)
    assert told(limit)[0][2] is not None


def test_the_number_of_queries_does_not_grow_with_the_taps(clock):
    counts = []
    for taps in (2, 20):
        benches = [Bench(np.full(720, 5.0)) for _ in range(taps)]
        for bench in benches:
            bench.limit("trusted_share", **SHARE)
            bench.limit("time_to_limit_s", **AHEAD)
            store_readings(bench.tap, bench.at_us, sequence=np.arange(720), boot="b", **bench.ports)
        clock(NOON_US + 7200 * S)
        process_touched(NOON_US + 7200 * S)
        roll_up_due(NOON_US + 7200 * S)
        with CaptureQueriesContext(connection, ) as queries:
            assert judge_derived(NOON_US + 7200 * S) == taps
        counts.append(len(queries))
    assert counts[0] == counts[1] <= 24


def test_catch_up_judges_it_too(clock):
    angle, bad = bad_share()
    bench = Bench(angle, bad)
    limit = bench.limit("trusted_share", **SHARE)
    store_readings(bench.tap, bench.at_us, sequence=np.arange(len(angle)), boot="b", **bench.ports)
    clock(NOON_US + 7 * HOUR * S)
    catch_up(NOON_US + 7 * HOUR * S)
    assert len(told(limit)) == 1
