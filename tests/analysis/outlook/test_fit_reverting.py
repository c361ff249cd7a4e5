"""Fits of a mean-reverting record: the regression of a textbook, errors that cover, gaps."""

import numpy as np
import pytest

from analysis.outlook.fit_reverting import fit_reverting
from tests.analysis.outlook.records import reverting


def test_even_spacing_is_the_autoregression():
    """Evenly spaced, the likelihood is that of x' = c + φ x + e: numpy's least squares gives φ, μ = c/(1-φ) and the variance."""
    at_s = 60.0 * np.arange(800)
    level = reverting(np.random.default_rng(1), at_s, 1 / 1800, 3.0, 0.5)
    slope, offset = np.polyfit(level[:-1], level[1:], 1)
    left = level[1:] - slope * level[:-1] - offset
    fit = fit_reverting(at_s, level)
    assert np.exp(-60.0 * fit.rate_per_s) == pytest.approx(slope, rel=1e-6)
    assert fit.mean == pytest.approx(offset / (1 - slope), rel=1e-6)
    assert fit.sd**2 == pytest.approx(np.mean(left**2) / (1 - slope**2), rel=1e-5)


def test_errors_cover_at_uneven_spacing():
    rng = np.random.default_rng(2)
    at_s = np.sort(rng.uniform(0, 400, 500))
    at_s = at_s[(at_s < 100) | (at_s > 180)]
    fits = [fit_reverting(at_s, reverting(rng, at_s, 0.5, -2.0, 1.5)) for _ in range(60)]
    rate_z = np.array([(np.log(fit.rate_per_s) - np.log(0.5)) / fit.rate_log_error for fit in fits])
    mean_z = np.array([(fit.mean + 2.0) / fit.mean_error for fit in fits])
    sd_z = np.array([(fit.sd - 1.5) / fit.sd_error for fit in fits])
    for z in (rate_z, mean_z, sd_z):
        assert abs(z.mean()) < 0.7 and 0.7 < z.std() < 1.4


def test_shift_and_unit_carry_over():
    at_s = np.arange(300.0)
    level = reverting(np.random.default_rng(6), at_s, 0.1, 0.0, 1.0)
    one, other = fit_reverting(at_s, level), fit_reverting(60.0 * at_s, 10.0 + 4.0 * level)
    assert other.rate_per_s == pytest.approx(one.rate_per_s / 60.0, rel=1e-5)
    assert other.mean == pytest.approx(10.0 + 4.0 * one.mean, rel=1e-5) and other.sd == pytest.approx(4.0 * one.sd, rel=1e-5)


def test_too_few_readings_are_refused():
    with pytest.raises(ValueError, match="at least 5"):
        fit_reverting(np.arange(4.0), np.arange(4.0))
