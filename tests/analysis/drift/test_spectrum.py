"""The basis in which random walk and reading noise are independent."""

import numpy as np
from scipy.stats import multivariate_normal

from analysis.drift.spectrum import (
    curvature_of,
    fit_bounded,
    fit_still,
    fit_walk,
    log_likelihood,
    runs_of,
    step_spectrum,
    transformed,
    walk_shape,
)
from tests.analysis.drift.walks import bounded


def covariance(count, walk_rad2, noise_rad2):
    """Of the steps of a walk read with noise, as a full matrix."""
    return (walk_rad2 + 2.0 * noise_rad2) * np.eye(count) - noise_rad2 * (np.eye(count, k=1) + np.eye(count, k=-1))


def test_the_transform_makes_the_covariance_diagonal():
    full = transformed(transformed(covariance(17, 0.3, 0.8)).T)
    np.testing.assert_allclose(full, np.diag(0.3 + 0.8 * curvature_of(17)), atol=1e-12)


def test_likelihood_is_that_of_the_full_gaussian():
    """scipy.stats.multivariate_normal."""
    steps = np.random.default_rng(1).standard_normal((12, 2))
    spectrum = step_spectrum(steps)
    found = log_likelihood(spectrum, 0.3 + 0.8 * spectrum.curvature) - 12 * np.log(2.0 * np.pi)
    full = multivariate_normal(np.zeros(12), covariance(12, 0.3, 0.8))
    np.testing.assert_allclose(found, full.logpdf(steps[:, 0]) + full.logpdf(steps[:, 1]), rtol=1e-12)


def test_shape_of_averaged_walks():
    """Means over n readings of a walk: variance and neighbour's covariance of their steps, from weights summed up."""
    n = 5
    weights = np.convolve(np.ones(n), np.ones(n)) / n  # of the walk's single steps, in one step of the means
    square, beside = float(weights @ weights) / n, float(weights[n:] @ weights[:-n]) / n
    curvature = curvature_of(30)
    np.testing.assert_allclose(walk_shape(curvature, n), square + beside * (2.0 - curvature), atol=1e-12)


def test_runs_split_at_gaps_and_short_ones_are_left_out():
    known = np.ones(40, bool)
    known[[10, 15]] = False
    assert runs_of(known).tolist() == [[0, 10], [16, 24]]
    steps = np.where(known[:, None], 1.0, np.nan)
    assert len(step_spectrum(steps).power) == 34
    assert len(step_spectrum(np.full((5, 1), np.nan)).power) == 0


def test_fits_find_what_was_put_in():
    rng = np.random.default_rng(6)
    count = 4000
    noise = 0.5 * rng.standard_normal((count, 2))
    free = step_spectrum(np.diff(np.cumsum(rng.standard_normal((count, 2)), axis=0) + noise, axis=0))
    found = fit_walk(free, 1)
    np.testing.assert_allclose([found.walk_rad2, found.noise_rad2], [1.0, 0.25], rtol=0.1)
    assert found.log_likelihood > fit_still(free).log_likelihood
    pulled = fit_bounded(step_spectrum(np.diff(bounded(count, 0.9, 1.0, rng) + 0.1 * noise, axis=0)), 1)
    np.testing.assert_allclose(pulled.inertia, 0.9, atol=0.02)
    still = fit_walk(step_spectrum(np.diff(noise, axis=0)), 1)
    assert still.walk_rad2 < 1e-3 * still.noise_rad2
    assert fit_walk(step_spectrum(np.zeros((20, 1))), 1).walk_rad2 == 0.0
