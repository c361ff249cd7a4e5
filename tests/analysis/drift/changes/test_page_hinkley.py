"""Page–Hinkley test."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from analysis.drift.changes.cusum import tabular_cusum
from analysis.drift.changes.page_hinkley import page_hinkley

levels = hnp.arrays(np.float64, st.integers(1, 60), elements=st.floats(-5, 5))


@given(levels, st.floats(0, 1))
def test_with_a_fixed_reference_it_is_the_tabular_cusum(level, tolerance):
    found, expected = page_hinkley(level, tolerance, reference=0.7), tabular_cusum(level, 0.7, tolerance)
    np.testing.assert_allclose(found.high, expected.high, atol=1e-9)
    np.testing.assert_allclose(found.low, expected.low, atol=1e-9)


@given(levels)
def test_with_a_learnt_mean_it_is_the_recursion(level):
    total = least = 0.0
    found = page_hinkley(level, 0.1)
    for k in range(len(level)):
        total += level[k] - np.mean(level[:k + 1]) - 0.1
        least = min(least, total)
        assert found.high[k] == pytest.approx(total - least, abs=1e-9)


def test_a_step_is_found_and_a_learnt_mean_follows_a_ramp():
    random = np.random.default_rng(0)
    step = random.normal(size=400) + np.where(np.arange(400) < 200, 0.0, 2.0)
    high, low = page_hinkley(step, 0.5).signals(12.0)
    assert 200 <= np.argmax(high) < 225 and not low.any()
    ramp = np.arange(400) * 1e-2
    assert page_hinkley(ramp, 0.5).high[-1] < page_hinkley(ramp, 0.5, reference=0.0).high[-1]


def test_nan_holds_and_wrong_tolerance_is_refused():
    found = page_hinkley(np.array([0.0, 4.0, np.nan, 4.0]), 0.5)
    assert found.high[2] == found.high[1] == 1.5
    with pytest.raises(ValueError, match="tolerance=-1"):
        page_hinkley(np.zeros(1), -1)
