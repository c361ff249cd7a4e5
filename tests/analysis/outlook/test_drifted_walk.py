"""First passage of a drifted walk: values computed apart, scipy's inverse Gaussian, limits and properties."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.special import zeta
from scipy.stats import invgauss

from analysis.outlook.drifted_walk import (
    DISCRETE_SHIFT,
    discrete_shift,
    passage_density,
    passage_moments,
    passage_probability,
    passage_quantile_s,
    reach_probability,
)
from tests.reference.values import close, reference, references

distances, drifts, spreads = st.floats(0.01, 100.0), st.floats(-3.0, 3.0), st.floats(0.05, 5.0)


@pytest.mark.parametrize("row", [*references("T08-ig-cdf"), reference("T08-ig-overflow")], ids=lambda row: row["id"])
def test_probability(row):
    """S. Redner (2001), R. S. Chhikara & J. L. Folks (1989), from memory; values by quadrature and mpmath."""
    a, v, s, t = (row["inputs"][name] for name in "avst")
    np.testing.assert_allclose(passage_probability(a, v, s, t), row["expected"], **close(row))


def test_moments_and_quantiles():
    row, quantiles = reference("T08-ig-mom"), reference("T08-ig-quant")
    moments = passage_moments(*(row["inputs"][name] for name in "avs"))
    for name, got in (("mean", moments.mean_s), ("var", moments.variance_s2), ("mode", moments.mode_s)):
        np.testing.assert_allclose(got, row["expected"][name], **close(row))
    got = passage_quantile_s(*(quantiles["inputs"][name] for name in "avs"), [0.1, 0.5, 0.9])
    np.testing.assert_allclose(got, quantiles["expected"], **close(quantiles))


def test_a_drift_away_may_never_arrive():
    row = reference("T08-bm-never")
    a, v, s = (row["inputs"][name] for name in "avs")
    np.testing.assert_allclose(reach_probability(a, v, s), row["expected"], **close(row))
    assert float(passage_probability(a, v, s, np.inf)) == pytest.approx(row["expected"])
    assert np.isfinite(passage_quantile_s(a, v, s, 0.30)) and np.isinf(passage_quantile_s(a, v, s, 0.31))
    assert np.isnan(passage_moments(a, v, s).mean_s)


def test_samples_see_the_barrier_further_out():
    """M. Broadie, P. Glasserman, S. Kou, Math. Finance 7, 325 (1997), from memory; constant from ζ(1/2)."""
    assert pytest.approx(-zeta(0.5) / np.sqrt(2 * np.pi), rel=1e-12) == DISCRETE_SHIFT
    row = reference("T08-discrete")
    a, s, t, dt = (row["inputs"][name] for name in ("a", "s", "t", "dt"))
    np.testing.assert_allclose(passage_probability(a, 0.0, s, t), row["expected"]["continuous"], **close(row))
    np.testing.assert_allclose(passage_probability(a + discrete_shift(s, dt), 0.0, s, t), row["expected"]["corrected"], rtol=3e-6)


def test_the_shift_is_what_a_simulation_sees():
    """25 samples of a walk, 40 000 times: the corrected chance within 4 standard errors + 0.005 of theory."""
    steps = np.random.default_rng(1).normal(0, 0.8 * 2.0, (40_000, 25))
    seen = np.mean(np.cumsum(steps, axis=1).max(axis=1) >= 5.0)
    theory = float(passage_probability(5.0 + discrete_shift(0.8, 4.0), 0.0, 0.8, 100.0))
    assert abs(seen - theory) < 0.015 and abs(seen - float(passage_probability(5.0, 0.0, 0.8, 100.0))) > 0.05


@settings(deadline=None)
@given(distances, st.floats(0.05, 3.0), spreads, st.floats(0.02, 20.0))
def test_against_scipys_inverse_gaussian(a, v, s, times_mean):
    """scipy.stats.invgauss(mu = mean/shape, scale = shape)."""
    mean, shape = a / v, (a / s) ** 2
    t = times_mean * mean
    expected = invgauss.cdf(t, mean / shape, scale=shape)
    assert float(passage_probability(a, v, s, t)) == pytest.approx(expected, rel=1e-6, abs=1e-12)


@settings(deadline=None)
@given(distances, drifts, spreads, st.floats(0.01, 0.99))
def test_quantile_inverts_the_probability(a, v, s, p):
    t = passage_quantile_s(a, v, s, p)
    if np.isfinite(t):
        assert float(passage_probability(a, v, s, t)) == pytest.approx(p, rel=1e-9)
    else:
        assert p >= reach_probability(a, v, s)


@settings(deadline=None)
@given(distances, drifts, spreads, st.floats(0.1, 50.0))
def test_more_time_nearer_limit_and_more_drift_never_lower_the_chance(a, v, s, t):
    chance = passage_probability(a, v, s, t)
    assert 0.0 <= chance <= 1.0
    assert passage_probability(a, v, s, 1.5 * t) >= chance - 1e-12
    assert passage_probability(0.5 * a, v, s, t) >= chance - 1e-12
    assert passage_probability(a, v + 0.1, s, t) >= chance - 1e-12


def test_density_is_that_of_the_probability():
    total = quad(lambda t: float(passage_density(3.0, 0.4, 0.7, t)), 0.0, 9.0)[0]
    assert total == pytest.approx(float(passage_probability(3.0, 0.4, 0.7, 9.0)), rel=1e-7)


def test_ends():
    assert passage_probability(0.0, 1.0, 1.0, 5.0) == 1.0 and passage_quantile_s(-1.0, 1.0, 1.0, 0.5) == 0.0
    assert passage_probability(1.0, 1.0, 1.0, 0.0) == 0.0 and passage_density(1.0, 1.0, 1.0, 0.0) == 0.0
    assert np.isnan(passage_probability(1.0, 1.0, 0.0, 5.0)) and np.isnan(passage_quantile_s(np.nan, 1.0, 1.0, 0.5))
    with pytest.raises(ValueError, match="probability"):
        passage_quantile_s(1.0, 1.0, 1.0, 1.0)


def test_arrays_and_scalars():
    together = passage_quantile_s([1.0, 2.0, 3.0], [0.1, -0.1, 0.0], 0.5, [[0.1], [0.5]])
    assert together.shape == (2, 3)
    assert together[1, 2] == passage_quantile_s(3.0, 0.0, 0.5, 0.5)
