"""The week: days of the lab's own clocks, runs over midnight, days of 23 and 25 hours."""

from datetime import UTC, date, datetime, timedelta
from zoneinfo import ZoneInfo

import pytest

from labmon.screen.run_calendar import Slot, day_bounds, monday_of, week

BERLIN, UTC_ZONE = ZoneInfo("Europe/Berlin"), ZoneInfo("UTC")


def slot(start, hours, run_id=1):
    return Slot(run_id, "scan", start, start + timedelta(hours=hours), "planned")


def times_of(rooms):
    return [[entry.times for entry in day] for day in rooms[0].benches[0].days]


@pytest.mark.parametrize(("monday", "hours"), [(date(2031, 3, 24), 23), (date(2031, 10, 20), 25), (date(2031, 6, 2), 24)])
def test_days_begin_at_the_labs_midnight(monday, hours):
    """Berlin 2031: clocks go forward on 30 March and back on 26 October, both Sundays."""
    bounds = day_bounds(monday, BERLIN)
    lengths = [(end - begin) / timedelta(hours=1) for begin, end in zip(bounds, bounds[1:], strict=False)]
    assert lengths == [24] * 6 + [hours] and all(one.astimezone(BERLIN).hour == 0 for one in bounds)


def test_a_run_over_midnight_stands_on_both_days_and_a_long_one_on_all_between():
    monday = date(2031, 3, 3)
    night = slot(datetime(2031, 3, 4, 20, tzinfo=UTC), 12)
    long = slot(datetime(2031, 3, 5, 12, tzinfo=UTC), 60, 2)
    rooms = week([("Hall", "n2")], [("n2", long), ("n2", night)], monday, UTC_ZONE)
    assert times_of(rooms) == [[], ["from 20:00"], ["until 08:00", "from 12:00"], ["all day"], ["until 24:00"], [], []]


def test_one_day_a_run_to_midnight_and_benches_by_room():
    monday = date(2031, 3, 3)
    slots = [("a", slot(datetime(2031, 3, 3, 9, tzinfo=UTC), 2)), ("a", slot(datetime(2031, 3, 3, 20, tzinfo=UTC), 4, 2))]
    rooms = week([("", "z"), ("Hall", "b"), ("Hall", "a")], slots, monday, UTC_ZONE)
    assert [(room.room, [bench.bench for bench in room.benches]) for room in rooms] == [("Hall", ["a", "b"]), ("no room", ["z"])]
    assert times_of(rooms)[0] == ["09:00–11:00", "20:00–24:00"]


def test_monday():
    assert monday_of(date(2031, 3, 9)) == monday_of(date(2031, 3, 3)) == date(2031, 3, 3)
