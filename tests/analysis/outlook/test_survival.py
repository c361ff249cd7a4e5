"""Product-limit quantiles against scipy and by hand."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import CensoredData, ecdf

from analysis.outlook.survival import time_quantile_s

NAN = np.nan


def test_by_hand():
    """10 windows of 12 h, 3 reached the limit after 1, 2 and 5 h: a tenth by 1 h, half never."""
    reached = np.array([7200.0, NAN, 3600.0, NAN, NAN, 18000.0, NAN, NAN, NAN, NAN])
    followed = np.full(10, 43_200.0)
    assert time_quantile_s(reached, followed, 0.1) == 3600.0
    assert time_quantile_s(reached, followed, 0.3) == 18000.0
    assert time_quantile_s(reached, followed, 0.5) == np.inf


def test_cut_cases_leave_the_count():
    """Followed 1, 2, 3, 4 h; the second was cut: F(3 h) = 1 - 3/4 · 1/2 = 0.625."""
    reached, followed = np.array([1.0, NAN, 3.0, 4.0]), np.array([1.0, 2.0, 3.0, 4.0])
    assert time_quantile_s(reached, followed, 0.6) == 3.0
    assert time_quantile_s(reached, followed, 0.63) == 4.0


@settings(deadline=None)
@given(st.lists(st.tuples(st.integers(1, 20), st.booleans()), min_size=1, max_size=30), st.floats(0.02, 0.98))
def test_against_scipys_product_limit(cases, probability):
    """scipy.stats.ecdf on right-censored data (E. L. Kaplan, P. Meier 1958)."""
    time = np.array([float(at) for at, _ in cases])
    has = np.array([reached for _, reached in cases])
    distribution = ecdf(CensoredData.right_censored(time, ~has)).cdf
    met = np.flatnonzero(distribution.probabilities >= probability - 1e-12)
    expected = distribution.quantiles[met[0]] if len(met) else np.inf
    assert time_quantile_s(np.where(has, time, NAN), time, probability) == expected


def test_no_case_and_wrong_shapes():
    assert np.isnan(time_quantile_s(np.zeros(0), np.zeros(0), 0.5))
    with pytest.raises(ValueError, match="one pair"):
        time_quantile_s(np.zeros(2), np.zeros(3), 0.5)
