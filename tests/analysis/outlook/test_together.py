"""Two limits of one run, counted by hand."""

import numpy as np
import pytest

from analysis.outlook.clearance import clear_angle_run
from analysis.outlook.together import cleared_together
from analysis.outlook.verdict import Reason, Verdict
from analysis.outlook.window import StartReading
from analysis.quantities import angle_rad_from_er_db
from tests.analysis.outlook.nights import DAY_US, START_US, bumped, calm, run_on

LIMIT_RAD = float(angle_rad_from_er_db(20.0))
NOW = StartReading(state=np.radians(3.0))


def asked(count, failing=(), now=NOW, **run):
    windows = [bumped(day, 9.0, 60, 5, is_working_day=True) if day in failing else calm(day, is_working_day=True)
               for day in range(count)]
    return clear_angle_run(windows, run_on(100, is_working_day=True, **run), now, LIMIT_RAD)


def test_one_limit_is_itself():
    one = asked(14)
    both = cleared_together([one])
    assert (both.verdict, both.held, both.count, both.failure_bound) == (one.verdict, 14, 14, one.failure_bound)
    assert both.further_windows == 0 and both.reasons == ()


def test_two_cleared_limits_with_different_bad_nights_are_not_cleared():
    """One failure in 22 clears each; together 2 of 22 failed: bound 26 %."""
    one, other = asked(22, failing=[3]), asked(22, failing=[7])
    assert one.verdict is other.verdict is Verdict.CLEARED
    both = cleared_together([one, other])
    assert (both.verdict, both.held, both.count) == (Verdict.NOT_CLEARED, 20, 22) and Reason.FAILED in both.reasons
    assert round(100 * both.failure_bound) == 26 and both.tenth_s == min(one.tenth_s, other.tenth_s)
    assert cleared_together([one, one]).verdict is Verdict.CLEARED


def test_only_common_windows_speak():
    both = cleared_together([asked(20), asked(10)])
    assert (both.verdict, both.count, both.further_windows) == (Verdict.THIN, 10, 4) and both.reasons == (Reason.THIN,)


def test_what_speaks_against_one_speaks_against_all():
    both = cleared_together([asked(20), asked(20, now=StartReading(state=np.radians(3.0), is_trusted=False))])
    assert both.verdict is Verdict.NOT_ENOUGH and Reason.READING_UNTRUSTED in both.reasons
    changed = cleared_together([asked(20), asked(20, changed_at_us=START_US + 99 * DAY_US)])
    assert changed.verdict is Verdict.NOT_ENOUGH and set(changed.reasons) == {Reason.FEW_WINDOWS, Reason.CHANGED}


def test_nothing_to_join():
    with pytest.raises(ValueError, match="empty"):
        cleared_together([])
