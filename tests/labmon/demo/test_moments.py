"""Day 1 is a Monday at midnight UTC, two to three weeks back."""

from datetime import UTC, datetime

from hypothesis import given
from hypothesis import strategies as st

from labmon.demo.moments import DAY_S, day_one_us, moment


@given(st.integers(1_577_836_800, 3_471_292_800))
def test_day_one_is_the_latest_monday_with_fourteen_days_after_it(now_s):
    """Any second of the years 2020 to 2079."""
    first = datetime.fromtimestamp(day_one_us(now_s * 1_000_000) / 1e6, UTC)
    assert (first.isoweekday(), first.hour, first.minute, first.second) == (1, 0, 0, 0)
    assert 14 * DAY_S <= now_s - first.timestamp() < 21 * DAY_S


def test_moments_count_from_day_one():
    assert moment(1, 0) == 0.0
    assert moment(3, 11, 42) == 2 * 86400 + 11 * 3600 + 42 * 60
