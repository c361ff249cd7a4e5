"""Which windows a past offers, by hand."""

import numpy as np

from analysis.outlook.minutes import (
    DAY_US,
    MINUTE_US,
    MOST_WINDOWS,
    Air,
    Happenings,
    Minutes,
    day_starts,
    hour_of,
    is_working_day,
    windows_of,
)
from analysis.outlook.paths import gather_paths
from analysis.outlook.window import LabelledSpan

HOUR_US = 60 * MINUTE_US
TEN_H = 36_000.0
LIMIT_RAD = 0.2
#: Monday 5 January 1970, 20:00.
MONDAY_US = 4 * DAY_US + 20 * HOUR_US


def minutes_from(start_us, count, *, angle_rad=0.05, holes=(), is_bound=False):
    """Minutes in a row, full of readings, but for index ranges without."""
    at_us = start_us + MINUTE_US * np.arange(count)
    keep = np.ones(count, bool)
    for first, last in holes:
        keep[first:last] = False
    at_us = at_us[keep]
    state = np.full(len(at_us), angle_rad)
    return Minutes(at_us, state, state - 0.01, np.full(len(at_us), 60.0), np.zeros(len(at_us)), np.full(len(at_us), is_bound))


def test_one_window_a_day_at_the_runs_hour():
    """Asked on day 4 at 20:00 for 10 h: the nights that began on days 0 to 3 are over (the last at 06:00 of day 4)."""
    run_us = MONDAY_US + 4 * DAY_US
    starts = day_starts(run_us, TEN_H, MONDAY_US, run_us)
    assert starts == tuple(MONDAY_US + day * DAY_US for day in range(4))
    assert day_starts(run_us + 59_000_000, TEN_H, MONDAY_US, run_us) == starts      # whole minutes


def test_a_window_must_be_over_by_now_not_only_by_the_start():
    """Planned at 04:00 for 20:00 of the same day: the night that began at 20:00 yesterday and ends at 06:00 is not over."""
    run_us = MONDAY_US + 4 * DAY_US
    assert day_starts(run_us, TEN_H, MONDAY_US, run_us - 16 * HOUR_US)[-1] == MONDAY_US + 2 * DAY_US


def test_long_runs_do_not_overlap():
    """13 days, 96 h: three windows."""
    run_us = MONDAY_US + 13 * DAY_US
    starts = day_starts(run_us, 96 * 3600.0, MONDAY_US, run_us)
    assert starts == tuple(MONDAY_US + day * DAY_US for day in (1, 5, 9))


def test_history_is_bounded():
    run_us = MONDAY_US + 5000 * DAY_US
    assert len(day_starts(run_us, TEN_H, 0, run_us)) == MOST_WINDOWS
    assert len(day_starts(run_us, 30 * 86_400.0, 0, run_us)) == 6
    assert day_starts(run_us, TEN_H, run_us, run_us) == ()


def test_windows_hold_what_was_read():
    minutes = minutes_from(MONDAY_US, 4 * 1440)
    starts = [MONDAY_US + day * DAY_US for day in (-2, 0, 1)]
    found = windows_of(minutes, starts, TEN_H, LIMIT_RAD)
    assert [window.start_us for window in found] == starts[1:]          # before the first reading there was no bench
    first = found[0]
    assert (first.start_hour, first.is_working_day, len(first.at_us)) == (20.0, True, 600)
    paths = gather_paths(found)
    np.testing.assert_allclose(paths.trusted_share, 1.0)
    np.testing.assert_allclose(paths.start, 0.04)                       # from the minute's mean, not its worst


def test_a_day_without_readings_at_the_runs_hour_gives_the_nearest_hour():
    """Two hours are missing around 20:00 of day 1: 10 h from 22:00 on have readings; from 18:00 or 19:00 they have not."""
    hole = (1440 - 120, 1440 + 110)
    minutes = minutes_from(MONDAY_US, 4 * 1440, holes=[hole])
    found = windows_of(minutes, [MONDAY_US, MONDAY_US + DAY_US], TEN_H, LIMIT_RAD)
    assert [window.start_hour for window in found] == [20.0, 22.0]


def test_a_day_without_any_good_hour_stays_as_it_is():
    minutes = minutes_from(MONDAY_US, 4 * 1440, holes=[(1000, 2500)])
    found = windows_of(minutes, [MONDAY_US + DAY_US], TEN_H, LIMIT_RAD)
    assert found[0].start_hour == 20.0 and gather_paths(found).trusted_share[0] == 0.0


def test_a_floor_beyond_the_limit_cannot_be_told():
    found = windows_of(minutes_from(MONDAY_US, 2000, angle_rad=0.3, is_bound=True), [MONDAY_US], TEN_H, LIMIT_RAD)
    assert gather_paths(found).trusted_share[0] == 0.0
    tight = gather_paths(windows_of(minutes_from(MONDAY_US, 2000, is_bound=True), [MONDAY_US], TEN_H, LIMIT_RAD))
    assert tight.trusted_share[0] == 1.0 and tight.is_start_bound[0] and tight.start[0] == 0.0


def test_partly_judged_minutes_count_in_part():
    minutes = minutes_from(MONDAY_US, 1440)
    minutes.judged_s[:60] = 30.0
    found = windows_of(minutes, [MONDAY_US], TEN_H, LIMIT_RAD)
    assert gather_paths(found).trusted_share[0] == 1.0 - 0.05


def test_what_people_said_goes_to_its_window():
    minutes = minutes_from(MONDAY_US, 4 * 1440)
    label = LabelledSpan(start_us=MONDAY_US + HOUR_US, end_us=MONDAY_US + HOUR_US, label="door")
    happened = Happenings(realigned_at_us=(MONDAY_US + DAY_US + HOUR_US,), labels=(label,))
    air = Air(np.array([MONDAY_US, MONDAY_US + HOUR_US]), np.array([294.0, 293.0]), np.array([295.0, np.nan]), HOUR_US)
    first, second = windows_of(minutes, [MONDAY_US, MONDAY_US + DAY_US], TEN_H, LIMIT_RAD, happened=happened, air=air)
    assert first.labels == (label,) and second.labels == ()
    assert first.cut_at_us is None and second.cut_at_us == MONDAY_US + DAY_US + HOUR_US
    np.testing.assert_allclose(first.temperature_k, (293.8, 295.2))
    assert second.temperature_k is None


def test_hours_and_days_are_utc():
    assert hour_of(MONDAY_US) == 20.0
    assert [is_working_day(MONDAY_US + day * DAY_US) for day in range(7)] == [True] * 5 + [False] * 2


def test_nothing_read():
    none = minutes_from(MONDAY_US, 0)
    assert windows_of(none, [MONDAY_US], TEN_H, LIMIT_RAD) == []
