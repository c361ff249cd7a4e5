"""Exact binomial bounds against counts on paper and scipy's binomial test."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import binom, binomtest

from analysis.outlook.binomial import failure_bound, failures_allowed, proportion_interval, windows_needed

counts = st.integers(0, 60).flatmap(lambda n: st.tuples(st.integers(0, n), st.just(n)))


@pytest.mark.parametrize(("count", "per_cent"), [(13, 21), (14, 19), (29, 10), (59, 5)])
def test_no_failure_by_hand(count, per_cent):
    """None of N failed: (1 - p)^N = 0.05, so p = 1 - 0.05^(1/N): 20.6, 19.3, 9.8, 4.95 %."""
    bound = float(failure_bound(0, count))
    assert (1.0 - bound) ** count == pytest.approx(0.05, rel=1e-12)
    assert round(100 * bound) == per_cent


def test_which_counts_are_within_a_fifth():
    """CONTRACT 5: no failure for N = 14 to 21, one from N = 22."""
    assert [failures_allowed(count, bound=0.2) for count in (13, 14, 21, 22)] == [-1, 0, 0, 1]
    assert [windows_needed(failed, bound=0.2) for failed in (0, 1)] == [14, 22]


@settings(deadline=None)
@given(counts)
def test_bounds_are_those_of_scipys_exact_test(pair):
    """scipy.stats.binomtest(...).proportion_ci(method="exact"), a general-purpose statistics library."""
    k, n = pair
    if n == 0:
        assert failure_bound(k, n) == 1.0 and tuple(proportion_interval(k, n)) == (0.0, 1.0)
        return
    one_sided = binomtest(k, n, alternative="less").proportion_ci(0.95, "exact")
    assert float(failure_bound(k, n)) == pytest.approx(one_sided.high, rel=1e-9)
    both = binomtest(k, n).proportion_ci(0.95, "exact")
    np.testing.assert_allclose(np.array(proportion_interval(k, n)), [both.low, both.high], atol=1e-9)


@settings(deadline=None)
@given(counts.filter(lambda pair: pair[0] < pair[1]))
def test_at_the_bound_so_few_failures_have_five_per_cent(pair):
    """Definition: P(K ≤ k | p = bound) = 1 - level."""
    k, n = pair
    assert binom.cdf(k, n, float(failure_bound(k, n))) == pytest.approx(0.05, rel=1e-6)


@settings(deadline=None)
@given(counts.filter(lambda pair: pair[1] > 0))
def test_bound_falls_with_windows_and_rises_with_failures(pair):
    k, n = pair
    assert failure_bound(k, n + 1) <= failure_bound(k, n) <= failure_bound(min(k + 1, n), n)


@pytest.mark.parametrize(("k", "n"), [(-1, 3), (4, 3), (0.5, 3)])
def test_shares_are_refused(k, n):
    with pytest.raises(ValueError, match="whole numbers"):
        failure_bound(k, n)
