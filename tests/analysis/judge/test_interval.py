import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.interval import IntervalState, intervals_s, pass_samples


def test_median_ignores_a_gap():
    """Spacings 1 1 1 1 60 1: the median of the recent ones stays 1 s."""
    at_us = np.cumsum([0, 1, 1, 1, 1, 60, 1]) * 1_000_000
    assert pass_samples(IntervalState(), at_us).interval_s == 1.0
    np.testing.assert_allclose(intervals_s(IntervalState(), at_us)[1:], 1.0)
    assert np.isnan(intervals_s(IntervalState(), at_us)[0])


def test_interval_follows_a_new_rate_after_half_the_window():
    at_us = np.cumsum([0] + [1] * 20 + [5] * 8) * 1_000_000
    assert intervals_s(IntervalState(), at_us)[-2] == 1.0 and intervals_s(IntervalState(), at_us)[-1] == 5.0


@given(st.lists(st.integers(0, 10_000_000), min_size=1, max_size=60), st.data())
def test_cutting_the_samples_changes_nothing(steps, data):
    at_us = np.cumsum(np.array(steps, dtype=np.int64))
    cut = data.draw(st.integers(0, len(at_us)))
    middle = pass_samples(IntervalState(), at_us[:cut])
    middle = IntervalState.from_json(middle.as_json())
    whole = intervals_s(IntervalState(), at_us)
    np.testing.assert_array_equal(
        np.concatenate([intervals_s(IntervalState(), at_us[:cut]), intervals_s(middle, at_us[cut:])]), whole
    )
    assert pass_samples(middle, at_us[cut:]) == pass_samples(IntervalState(), at_us)


@given(st.lists(st.integers(1, 10_000_000), min_size=1, max_size=60))
def test_last_interval_is_the_states(steps):
    at_us = np.cumsum(np.array([0, *steps], dtype=np.int64))
    assert intervals_s(IntervalState(), at_us)[-1] == pytest.approx(pass_samples(IntervalState(), at_us).interval_s)
