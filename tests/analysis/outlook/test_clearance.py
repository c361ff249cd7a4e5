"""Clearances that can be counted on paper (JOB 4, 7a, 8; CONTRACT 5)."""

import math

import numpy as np
import pytest

from analysis.outlook.clearance import clear_angle_run, clear_sop_run
from analysis.outlook.comparable import SetAside, Widening
from analysis.outlook.paths import gather_paths
from analysis.outlook.verdict import Reason, Verdict
from analysis.outlook.window import LabelledSpan, StartReading
from analysis.quantities import angle_rad_from_er_db
from tests.analysis.outlook.nights import DAY_US, MINUTE_US, START_US, bumped, calm, minutes_us, night, run_on

LIMIT_RAD = float(angle_rad_from_er_db(20.0))                   # 11.42°
NOW = StartReading(state=np.radians(3.0))


def pooled(count, first=0):
    """Working nights in a row, so that each counts for the kind of the run."""
    return [calm(day, is_working_day=True) for day in range(first, first + count)]


def asked(windows, now=NOW, day=100, **run):
    return clear_angle_run(windows, run_on(day, is_working_day=True, **run), now, LIMIT_RAD)


@pytest.mark.parametrize(("count", "verdict", "per_cent"), [
    (3, Verdict.NOT_ENOUGH, 63), (13, Verdict.THIN, 21), (14, Verdict.CLEARED, 19), (29, Verdict.CLEARED, 10),
    (59, Verdict.CLEARED, 5)])
def test_all_held(count, verdict, per_cent):
    answer = asked(pooled(count))
    assert (answer.verdict, answer.held, answer.count) == (verdict, count, count)
    assert round(100 * answer.failure_bound) == per_cent
    assert answer.median_s == answer.tenth_s == math.inf and answer.share == answer.trusted_share == 1.0 and not answer.failed
    assert answer.remedy.further_windows == max(0, 14 - count)


def test_three_nights_are_named_as_few():
    assert asked(pooled(3)).reasons == (Reason.FEW_WINDOWS,)


def test_a_change_this_morning_leaves_no_evidence():
    answer = asked(pooled(30), changed_at_us=START_US + 99 * DAY_US)
    assert answer.verdict is Verdict.NOT_ENOUGH and answer.count == 0
    assert {Reason.FEW_WINDOWS, Reason.CHANGED} == set(answer.reasons)
    assert {why for _, why in answer.set_aside} == {SetAside.OLD_CONFIGURATION}


def test_a_fortnight_pooled_is_thin():
    """JOB 8: 13 of 13, weekdays and weekends pooled → likely but thin, failure up to 21 %."""
    answer = clear_angle_run([calm(day) for day in range(13)], run_on(13), NOW, LIMIT_RAD)
    assert (answer.verdict, answer.widened) == (Verdict.THIN, (Widening.DAYS,)) and answer.reasons == (Reason.THIN,)


def test_three_of_thirteen_fail():
    """From 3° a night that rose by 8.5° crosses 11.42°, one that rose by 8.3° does not; times by hand."""
    windows = pooled(13)
    for day, minute in ((3, 60), (7, 120), (10, 300)):
        at_us = [int(at) for at in minutes_us(day)]
        touched = LabelledSpan(start_us=at_us[minute] - 5 * MINUTE_US, end_us=at_us[minute], label="touched")
        later = LabelledSpan(start_us=at_us[minute + 20], end_us=at_us[minute + 30], label="later")
        windows[day] = bumped(day, 8.5, minute, 15, is_working_day=True, labels=(touched, later))
    windows[5] = bumped(5, 8.3, 60, 15, is_working_day=True)
    answer = asked(windows)
    assert (answer.verdict, answer.held, answer.count) == (Verdict.NOT_CLEARED, 10, 13)
    assert answer.share == pytest.approx(10 / 13) and answer.reasons == (Reason.FAILED, Reason.THIN)
    assert answer.tenth_s == 7200.0 and answer.median_s == math.inf        # 2 of 13 is the first share of a tenth
    assert [window.start_us for window in answer.failed] == [windows[day].start_us for day in (3, 7, 10)]
    first = answer.failed[0]
    assert first.crossed_at_us == first.failed_at_us == minutes_us(3)[60] and first.beyond_s == 900.0
    assert first.labels == ("touched",) and np.degrees(first.worst_rad) == pytest.approx(11.5)


def test_what_would_change_it():
    """14 nights, one failing at 8.5° after 2 h: cleared with a limit of 11.5°, or for 2 h, or after 8 more good nights (22)."""
    answer = asked([*pooled(13), bumped(20, 8.5, 120, 5, is_working_day=True)])
    assert answer.verdict is Verdict.NOT_CLEARED and answer.remedy.further_windows == 8
    assert np.degrees(answer.remedy.limit_rad) == pytest.approx(11.5) and answer.remedy.length_s == 7200.0
    windows = [*pooled(13), bumped(20, 8.5, 120, 5, is_working_day=True)]
    assert clear_angle_run(windows, run_on(100, is_working_day=True), NOW, answer.remedy.limit_rad).verdict is Verdict.CLEARED
    assert asked(windows, length_s=7200.0).verdict is Verdict.CLEARED
    assert asked([*windows, *pooled(8, first=30)]).verdict is Verdict.CLEARED


def test_allowed_seconds_count():
    windows = [*pooled(13), bumped(20, 8.5, 120, 5, is_working_day=True)]
    assert asked(windows, allowed_s=299.0).verdict is Verdict.NOT_CLEARED
    answer = asked(windows, allowed_s=300.0)
    assert answer.verdict is Verdict.CLEARED and answer.held == 14


@pytest.mark.parametrize(("now", "run", "reason", "verdict"), [
    (StartReading(state=0.05, is_trusted=False), {}, Reason.READING_UNTRUSTED, Verdict.NOT_ENOUGH),
    (StartReading(state=math.nan), {}, Reason.READING_UNTRUSTED, Verdict.NOT_ENOUGH),
    (StartReading(state=0.05, is_at_floor=True), {}, Reason.AT_FLOOR, Verdict.NOT_ENOUGH),
    (StartReading(state=0.05, open_causes=("laser hops",)), {}, Reason.OPEN_CAUSE, Verdict.NOT_CLEARED),
    (StartReading(state=np.radians(12.0)), {}, Reason.BEYOND_NOW, Verdict.NOT_CLEARED),
    (NOW, {"temperature_k": 299.0}, Reason.TEMPERATURE_UNSEEN, Verdict.NOT_ENOUGH),
    (NOW, {"length_s": 90_000.0}, Reason.LENGTH_UNSEEN, Verdict.NOT_ENOUGH),
    (NOW, {"start_hour": 9.0}, Reason.HOUR_UNSEEN, Verdict.NOT_ENOUGH)])
def test_reasons(now, run, reason, verdict):
    windows = [calm(day, is_working_day=True, temperature_k=(293.0, 296.0)) for day in range(20)]
    answer = asked(windows, now, **run)
    assert answer.verdict is verdict and reason in answer.reasons
    assert asked(windows, temperature_k=294.0).verdict is Verdict.CLEARED


def test_no_window_at_all():
    answer = asked([])
    assert answer.verdict is Verdict.NOT_ENOUGH and answer.reasons == (Reason.FEW_WINDOWS,)
    assert math.isnan(answer.share) and answer.failure_bound == 1.0 and answer.remedy.further_windows == 14


def circled(day, radius_deg, azimuth_deg):
    """A Stokes night that leaves (1, 0, 0) by a radius for its second half."""
    radius, azimuth = np.radians([radius_deg, azimuth_deg])
    away = [np.cos(radius), np.sin(radius) * np.cos(azimuth), np.sin(radius) * np.sin(azimuth)]
    return night(day, np.vstack([np.tile([1.0, 0.0, 0.0], (360, 1)), np.tile(away, (360, 1))]), is_working_day=True)


def test_stokes_knows_the_direction():
    """Today 8° off towards +S2: nights that moved 6° further that way fail (14°), those that moved back (2°) or aside (10°) hold.

    By hand in the small-angle plane; on the sphere the last is 9.98°.
    """
    now = StartReading(state=np.array([np.cos(np.radians(8.0)), np.sin(np.radians(8.0)), 0.0]))
    wanted = np.array([1.0, 0.0, 0.0])
    windows = [circled(day, 6.0, azimuth) for day, azimuth in enumerate([0.0, 90.0, 180.0, 270.0] * 4)]
    answer = clear_sop_run(windows, run_on(100, is_working_day=True), now, LIMIT_RAD, wanted=wanted)
    assert (answer.held, answer.count, answer.verdict) == (12, 16, Verdict.NOT_CLEARED)
    assert {round(math.degrees(window.worst_rad), 6) for window in answer.failed} == {14.0}
    assert answer.median_s == math.inf and answer.tenth_s == 6 * 3600.0
    path = np.concatenate([np.zeros(360), np.full(360, np.radians(6.0))])
    angles = [night(day, path, is_working_day=True) for day in range(16)]
    assert clear_angle_run(angles, run_on(100, is_working_day=True), StartReading(state=np.radians(8.0)), LIMIT_RAD).held == 0


def test_gathered_windows_give_the_same_answer():
    windows = [*pooled(13), bumped(20, 8.5, 120, 5, is_working_day=True)]
    assert repr(asked(gather_paths(windows, 43_200.0))) == repr(asked(windows))


def test_order_does_not_matter():
    windows = [*pooled(13), bumped(20, 8.5, 120, 5, is_working_day=True)]
    one, other = asked(windows), asked(windows[::-1])
    assert (one.verdict, one.failed, one.tenth_s, one.remedy) == (other.verdict, other.failed, other.tenth_s, other.remedy)
