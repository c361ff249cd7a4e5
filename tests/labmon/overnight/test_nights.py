"""Nights by the lab's clock."""

from datetime import UTC, date, datetime
from zoneinfo import ZoneInfo

import pytest

from labmon.overnight.nights import Hours, last_night, night_of

BERLIN = ZoneInfo("Europe/Berlin")


@pytest.mark.parametrize(("day", "hours"), [("2031-01-10", 14), ("2031-03-29", 13), ("2031-10-25", 15)])
def test_a_night_is_fourteen_hours_but_where_the_clocks_change(day, hours):
    """European summer time 2031 begins on 30 March and ends on 26 October (last Sundays, directive 2000/84/EC)."""
    night = night_of(date.fromisoformat(day), BERLIN, Hours())
    assert (night.until_at - night.from_at).total_seconds() == hours * 3600
    assert night.from_at.astimezone(BERLIN).hour == 18 and night.until_at.astimezone(BERLIN).hour == 8


@pytest.mark.parametrize(("now", "day"), [("07:59", "2031-03-03"), ("08:00", "2031-03-04"), ("23:00", "2031-03-04")])
def test_the_last_night_is_the_newest_that_is_over(now, day):
    local = datetime.fromisoformat(f"2031-03-05T{now}").replace(tzinfo=BERLIN)
    assert last_night(local.astimezone(UTC), BERLIN, Hours()).date == date.fromisoformat(day)
