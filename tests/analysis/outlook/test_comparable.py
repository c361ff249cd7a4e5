"""Which windows count, counted by hand."""

import numpy as np
import pytest

from analysis.outlook.comparable import SetAside, Widening, comparable_windows
from analysis.outlook.paths import gather_paths
from tests.analysis.outlook.nights import DAY_US, START_US, bumped, calm, minutes_us, run_on


def chosen(windows, run, failed=()):
    has_failed = np.zeros(len(windows), bool)
    has_failed[list(failed)] = True
    return comparable_windows(gather_paths(windows, run.length_s), run, has_failed)


def test_working_days_speak_for_working_days():
    """Three weeks from a Monday: asked on a Monday, 15 of 21 nights count, 6 were weekends."""
    found = chosen([calm(day) for day in range(21)], run_on(21))
    assert len(found.index) == 15 and found.widened == ()
    assert [why for _, why in found.set_aside] == [SetAside.OTHER_KIND] * 6


def test_weekends_are_pooled_where_too_few():
    """JOB 8: asked on day 14, a Sunday, three weekend nights are too few; pooled, there are 13."""
    found = chosen([calm(day) for day in range(13)], run_on(13))
    assert len(found.index) == 13 and found.widened == (Widening.DAYS,)


def test_kind_is_widened_step_by_step():
    """4 working nights at 20:00, 2 at 23:00 (3 h away), 2 at noon, and others in another air regime."""
    windows = [calm(day, start_hour=20.0 if day < 4 else 23.0 if day < 6 else 12.0, is_working_day=True) for day in range(8)]
    found = chosen(windows, run_on(9, is_working_day=True))
    assert len(found.index) == 8 and found.widened == (Widening.HOURS, Widening.ALL_HOURS)
    found = chosen([*windows[:6], *(calm(day, air="night", is_working_day=True) for day in (6, 7))],
                   run_on(9, is_working_day=True))
    assert found.widened == (Widening.HOURS, Widening.AIR) and len(found.index) == 8


def test_hours_are_a_circle():
    """23:30 and 01:00 are 1.5 h apart."""
    found = chosen([calm(day, start_hour=23.5, is_working_day=True) for day in range(8)],
                   run_on(9, start_hour=1.0, is_working_day=True))
    assert found.widened == () and found.has_near_hour
    found = chosen([calm(day, start_hour=9.0, is_working_day=True) for day in range(8)], run_on(9, is_working_day=True))
    assert len(found.index) == 8 and not found.has_near_hour


def test_a_change_cuts_history():
    found = chosen([calm(day) for day in range(20)], run_on(20, changed_at_us=START_US + 17 * DAY_US - 1))
    assert list(found.index) == [17, 18, 19]
    assert sum(why is SetAside.OLD_CONFIGURATION for _, why in found.set_aside) == 17


def test_trust_length_and_end_are_wanted():
    trusted = np.ones(720, bool)
    trusted[:37] = False                                        # 5.1 % of the night
    windows = [calm(0, is_trusted=trusted), calm(1, length_s=40_000.0), calm(2), calm(3)]
    found = chosen(windows, run_on(3))
    assert [why for _, why in found.set_aside] == [SetAside.UNTRUSTED, SetAside.SHORTER, SetAside.NOT_OVER]
    assert found.has_length
    assert not chosen([calm(day, length_s=40_000.0) for day in range(3)], run_on(3)).has_length


def test_a_realigned_window_counts_only_when_it_had_failed():
    at_us = int(minutes_us(0)[300])
    windows = [calm(0, cut_at_us=at_us), bumped(1, 20.0, 100, 5, cut_at_us=at_us + DAY_US), calm(2)]
    found = chosen(windows, run_on(3), failed=[1])
    assert list(found.index) == [1, 2] and dict(found.set_aside)[0] is SetAside.REALIGNED


def test_windows_do_not_overlap():
    """Two windows a night, an hour apart: one of each night counts, the newer one."""
    windows = [calm(day, start_us=START_US + day * DAY_US + hour * 3_600_000_000, start_hour=20.0 + hour,
                    at_us=minutes_us(day) + hour * 3_600_000_000) for day in range(8) for hour in (0, 1)]
    found = chosen(windows, run_on(9))
    assert len(found.index) == 8 and set(found.index) == set(range(1, 16, 2))
    starts = np.array([windows[number].start_us for number in found.index])
    assert np.diff(starts).min() >= 43_200 * 10**6


@pytest.mark.parametrize("count", [1, 6])
def test_too_few_stay_too_few(count):
    assert len(chosen([calm(day) for day in range(count)], run_on(count)).index) == count
