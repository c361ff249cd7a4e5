"""What autocorrelated readings are worth."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import signal
from statsmodels.tsa.stattools import acf

from analysis.drift.effective import (
    autocorrelation,
    block_inflation,
    correlation_effective_size,
    mean_effective_size,
    newey_west_lags,
    pairs_at_lag,
    unbiased_lag1,
    variance_inflation,
)
from tests.reference.values import close, reference


def ar1(rho, shape, seed=0):
    """Stationary AR(1) series along the last axis, standard deviation 1."""
    noise = np.random.default_rng(seed).normal(size=shape)
    noise[..., 1:] *= np.sqrt(1 - rho**2)
    return signal.lfilter([1.0], [1.0, -rho], noise, axis=-1)


def test_effective_size_of_a_mean():
    row = reference("T07-neff-mean-0.5")
    found = mean_effective_size(row["inputs"]["n"], row["inputs"]["rho"])
    np.testing.assert_allclose(found, row["expected"]["exact"], **close(row))
    with pytest.raises(ValueError, match="a walk has no mean"):
        mean_effective_size(100, 1.0)


def test_effective_size_of_a_correlation():
    row = reference("T07-neff-corr")
    x, lag = row["inputs"], np.arange(300)
    found = correlation_effective_size(10**9, x["rho_x"]**lag, x["rho_y"]**lag) / 1e9 * x["n"]
    np.testing.assert_allclose(found, row["expected"]["n_eff"], rtol=1e-6)
    finite = correlation_effective_size(x["n"], x["rho_x"]**lag, x["rho_y"]**lag)
    assert finite == pytest.approx(141.3, rel=0.01)  # simulated 1/var(r) of the same row


def test_autocorrelation_without_gaps_is_the_usual_one():
    """statsmodels acf (not adjusted)."""
    level = ar1(0.6, 300)
    np.testing.assert_allclose(autocorrelation(np.arange(300), level, 20), acf(level, nlags=20), rtol=1e-10)


def test_autocorrelation_looks_across_gaps_by_their_length():
    """Closing 300 gaps up would give 0.49; pairs by true lag keep 0.8."""
    level = ar1(0.8, 40_000)
    keep = np.random.default_rng(1).random(40_000) < 0.3
    number = np.flatnonzero(keep)
    found = autocorrelation(number, level[keep], 3)
    np.testing.assert_allclose(found[1:], [0.8, 0.64, 0.512], atol=0.03)
    assert autocorrelation(np.arange(len(number)), level[keep], 1)[1] < 0.6


def test_pairs_are_those_whose_numbers_differ_by_the_lag():
    early, late = pairs_at_lag(np.array([3, 4, 5, 9, 10]), 1)
    assert early.tolist() == [0, 1, 3] and late.tolist() == [1, 2, 4]
    assert pairs_at_lag(np.array([0, 5]), 2)[0].tolist() == []


@pytest.mark.parametrize(("rho", "fitted"), [(0.0, 1), (0.5, 1), (0.5, 2), (0.8, 2)])
def test_lag1_bias_is_taken_off(rho, fitted):
    """Simulation: 4000 series of 100, with a mean or a line fitted."""
    series = ar1(rho, (4000, 100), seed=3)
    basis = np.vander(np.linspace(-1, 1, 100), fitted)
    left = series - series @ basis @ np.linalg.inv(basis.T @ basis) @ basis.T
    raw = np.sum(left[:, 1:] * left[:, :-1], axis=1) / np.sum(left**2, axis=1)
    assert np.mean(unbiased_lag1(raw, 100, fitted)) == pytest.approx(rho, abs=0.02)
    assert np.mean(raw) < rho - 0.009


def test_inflation_of_ar1_is_its_long_run_variance():
    found = [variance_inflation(np.arange(1000), ar1(0.5, 1000, seed)) for seed in range(20)]
    assert np.mean(found) == pytest.approx(3.0, rel=0.15)
    assert variance_inflation(np.arange(1000), ar1(-0.5, 1000)) >= 1.0
    assert np.isnan(variance_inflation(np.arange(7), np.arange(7.0)))


@pytest.mark.parametrize("rho", [0.0, 0.9, 0.99])
def test_inflation_of_many_readings(rho):
    level = ar1(rho, 80_000, seed=4)
    assert block_inflation(np.arange(80_000) * 1_000_000, level) == pytest.approx((1 + rho) / (1 - rho), rel=0.25)
    assert block_inflation(np.arange(5), np.ones(5)) == 1.0


@given(st.integers(1, 10_000))
def test_lags_grow_slowly(count):
    assert newey_west_lags(count) == int(4 * (count / 100) ** (2 / 9)) and newey_west_lags(0) == 0


def test_wrong_bins_are_refused():
    with pytest.raises(ValueError, match="rise strictly"):
        autocorrelation(np.array([0, 0]), np.zeros(2), 1)
    with pytest.raises(ValueError, match="one level per bin"):
        autocorrelation(np.array([0, 1]), np.zeros(3), 1)
    with pytest.raises(ValueError, match="NaN"):
        autocorrelation(np.array([0, 1]), np.array([0.0, np.nan]), 1)
    assert np.isnan(autocorrelation(np.arange(3), np.ones(3), 1)).all()
