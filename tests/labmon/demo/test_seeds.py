"""The same second has the same noise, however the time axis is cut."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from labmon.demo.seeds import white_per_day, white_per_second


@given(st.integers(0, 9000), st.integers(1, 8000))
def test_cutting_the_time_axis_changes_nothing(cut, step):
    at_s = np.arange(-500.0, 9000.0, 1.0)
    whole = white_per_second(1, "port", at_s)
    parts = [white_per_second(1, "port", at_s[at_s < cut]), white_per_second(1, "port", at_s[at_s >= cut])]
    np.testing.assert_array_equal(np.concatenate(parts), whole)
    np.testing.assert_array_equal(white_per_second(1, "port", at_s[::step]), whole[::step])


def test_noise_is_unit_and_differs_by_name_and_seed():
    at_s = np.arange(50_000.0)
    one = white_per_second(1, "a", at_s)
    assert abs(one.mean()) < 0.02
    assert abs(one.std() - 1.0) < 0.02
    for other in (white_per_second(1, "b", at_s), white_per_second(2, "a", at_s)):
        assert abs(np.corrcoef(one, other)[0, 1]) < 0.02


def test_more_days_leave_the_earlier_ones_as_they_are():
    np.testing.assert_array_equal(white_per_day(3, "air", -1, 5, 100)[:300], white_per_day(3, "air", -1, 3, 100))
