from datetime import UTC, datetime, timedelta

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from labmon.review.figures import (
    AlarmFacts,
    CallFacts,
    ack_times,
    calls_by_person,
    chattering,
    is_night,
    is_office_time,
    most_within,
    outside_office_share,
    stale,
    top_share,
    worst_nuisances,
)

MONDAY = datetime(2031, 3, 3, tzinfo=UTC)  # a Monday: the first of January 1970 was a Thursday, 22341 days before
seconds = st.integers(0, 7 * 86_400 - 1)


def at(hours: float, seconds_s: float = 0.0) -> datetime:
    return MONDAY + timedelta(hours=hours, seconds=seconds_s)


def alarm(source: str, hours: float, *, length_s: float | None = 60.0, taken_s: float | None = None, seconds_s: float = 0.0):
    raised = at(hours, seconds_s)
    return AlarmFacts(source, raised, None if length_s is None else raised + timedelta(seconds=length_s), raised,
                      None if taken_s is None else raised + timedelta(seconds=taken_s))


def test_the_monday_is_one():
    assert MONDAY.isoweekday() == 1


def test_the_night_belongs_to_the_evening_it_began():
    calls = [CallFacts("ann", at(hours), False) for hours in (21.9, 22.0, 29.9, 30.0, 46.0)] + [CallFacts("ann", at(23), True)]
    [row] = calls_by_person(calls)
    assert (row.calls, row.reminders, row.at_night, row.worst_night) == (5, 1, 4, 3)
    assert row.nights == {"2031-03-03": 3, "2031-03-04": 1}


@given(seconds)
def test_night_and_office_time_never_meet(second):
    moment = at(0, second)
    assert not (is_night(moment) and is_office_time(moment))


def test_office_time_has_50_of_168_hours():
    assert sum(is_office_time(at(hour + 0.5)) for hour in range(168)) == 50
    assert outside_office_share([CallFacts("ann", at(hour + 0.5), False) for hour in range(168)]) == pytest.approx(118 / 168)
    assert outside_office_share([]) is None


def test_the_worst_are_those_that_raise_most():
    alarms = [alarm(name, hour, length_s=length_s) for name, count, length_s in (("a", 5, 10), ("b", 3, None), ("c", 1, 10))
              for hour in range(count)]
    found = worst_nuisances(alarms)
    assert [(one.source, one.count, one.share, one.median_open_s) for one in found] == [
        ("a", 5, pytest.approx(5 / 9), 10.0), ("b", 3, pytest.approx(3 / 9), None)]
    assert len(worst_nuisances([alarm(str(one), hour) for one in range(9) for hour in range(2)])) == 5
    assert top_share(alarms, 1) == pytest.approx(5 / 9) and top_share([]) is None


def test_chattering_is_three_in_a_minute():
    """Three or more within one minute: trade texts on ANSI/ISA-18.2 (read in secondary texts)."""
    assert chattering([alarm("a", 0, seconds_s=second) for second in (0, 30, 60)]) == ["a"]
    assert chattering([alarm("a", 0, seconds_s=second) for second in (0, 30, 60.001)]) == []
    assert chattering([alarm(name, 0, seconds_s=second) for second, name in ((0, "a"), (1, "b"), (2, "a"))]) == []


def test_stale_is_open_for_over_a_day():
    """Over 24 h: trade texts on ANSI/ISA-18.2 (read in secondary texts)."""
    alarms = [alarm("exactly", 0, length_s=86_400), alarm("longer", 0, length_s=86_401), alarm("open", 1, length_s=None),
              alarm("fresh", 30, length_s=None)]
    assert [one.source for one in stale(alarms, at(50))] == ["open", "longer"]
    assert stale(alarms, at(20)) == []


@given(st.lists(seconds, max_size=60), st.integers(1, 86_400))
def test_most_within_is_what_trying_every_start_finds(found, width_s):
    times = [at(0, second) for second in found]
    tried = max((sum(start <= other <= start + width_s for other in found) for start in found), default=0)
    assert most_within(times, timedelta(seconds=width_s)) == tried


@given(st.lists(st.integers(0, 100_000), min_size=1, max_size=60))
def test_times_to_take_agree_with_numpy(found):
    """numpy.median and numpy.quantile(method="inverted_cdf"), which is the nearest rank (Hyndman and Fan 1996, definition 1)."""
    times = ack_times([alarm("a", 0, taken_s=second) for second in found] + [alarm("b", 0)])
    assert (times.count, times.taken) == (len(found) + 1, len(found))
    assert times.median_s == float(np.median(found))
    assert times.p90_s == float(np.quantile(found, 0.9, method="inverted_cdf"))


def test_nothing_taken_has_no_times():
    assert ack_times([alarm("a", 0)]).median_s is None and ack_times([]).p90_s is None
