"""Pettitt's test."""

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from analysis.drift.changes.pettitt import pettitt
from tests.reference.values import close, reference


def test_nile():
    row = reference("T06-nile-pettitt")
    found = pettitt(sm.datasets.nile.load_pandas().data["volume"].to_numpy())
    expected = row["expected"]
    wanted = [expected["K"], expected["index"], expected["p_approx"]]
    np.testing.assert_allclose([found.statistic, found.index, found.chance], wanted, **close(row))


@given(hnp.arrays(np.float64, st.integers(2, 30), elements=st.integers(-3, 3).map(float)))
def test_it_is_the_sum_of_signs(level):
    """Definition: U_t = Σ_{i≤t} Σ_{j>t} sign(x_i - x_j)."""
    u = [abs(np.sign(level[:t, None] - level[None, t:]).sum()) for t in range(1, len(level))]
    assert pettitt(level).statistic == pytest.approx(max(u))


def test_false_alarms_in_white_noise_stay_below_the_level():
    series = np.random.default_rng(0).normal(size=(2000, 100))
    share = np.mean([pettitt(row).chance < 0.05 for row in series])
    assert 0.01 < share <= 0.055


def test_one_reading_is_refused():
    with pytest.raises(ValueError, match="two finite readings"):
        pettitt(np.array([1.0]))
