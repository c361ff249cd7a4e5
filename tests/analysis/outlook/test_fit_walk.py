"""Fits of a walk: by hand, unbiased, with errors that cover."""

import numpy as np
import pytest

from analysis.outlook.fit_walk import fit_walk
from tests.analysis.outlook.records import walk


def test_by_hand():
    """Steps 1, 3, -1 in 1, 4, 1 s: drift 3/6 = 0.5; residuals 0.5, 1, -1.5 → spread² = (0.25 + 0.25 + 2.25)/2 = 1.375."""
    fit = fit_walk(np.array([0.0, 1.0, 5.0, 6.0]), np.array([0.0, 1.0, 4.0, 3.0]))
    assert (fit.drift_per_s, fit.steps, fit.span_s) == (0.5, 3, 6.0)
    assert fit.spread**2 == pytest.approx(1.375) and fit.drift_error == pytest.approx(np.sqrt(1.375 / 6.0))


def test_gaps_keep_their_true_time():
    """Uneven spacing and a gap of a third of the record change neither drift nor spread: z of 200 fits by chance."""
    rng = np.random.default_rng(2)
    at_s = np.sort(rng.uniform(0, 1000, 300))
    at_s = at_s[(at_s < 300) | (at_s > 600)]
    fits = [fit_walk(at_s, walk(rng, at_s, 0.02, 0.7)) for _ in range(200)]
    drift_z = np.array([(fit.drift_per_s - 0.02) / fit.drift_error for fit in fits])
    spread_z = np.array([(fit.spread - 0.7) / fit.spread_error for fit in fits])
    for z in (drift_z, spread_z):
        assert abs(z.mean()) < 4 / np.sqrt(200) and 0.8 < z.std() < 1.2
    assert np.mean([fit.spread_low <= 0.7 <= fit.spread_high for fit in fits]) > 0.9


def test_reading_noise_is_told_from_the_walk():
    """Noise of 0.5 on steps of 0.2: plain, the spread is 3.7 times too large; with noise, right within a tenth."""
    rng = np.random.default_rng(3)
    at_s = np.arange(20_000.0)
    level = walk(rng, at_s, 0.0, 0.2) + 0.5 * rng.standard_normal(len(at_s))
    plain, fit = fit_walk(at_s, level), fit_walk(at_s, level, with_noise=True)
    assert plain.spread > 3.0 * 0.2
    assert fit.reading_noise == pytest.approx(0.5, rel=0.05) and fit.spread == pytest.approx(0.2, rel=0.1)


def test_empty_rows_are_left_out():
    at_s, level = np.arange(50.0), walk(np.random.default_rng(5), np.arange(50.0), 0.0, 1.0)
    holed = level.copy()
    holed[[7, 20]] = np.nan
    kept = np.delete(np.arange(50), [7, 20])
    assert fit_walk(at_s, holed) == fit_walk(at_s[kept], level[kept])


@pytest.mark.parametrize(("at_s", "level"), [
    ([0.0, 1.0], [1.0, 2.0]), ([0.0, 0.0, 1.0], [1.0, 2.0, 3.0]), ([0.0, 1.0, 2.0], [1.0])])
def test_what_cannot_be_fitted_is_refused(at_s, level):
    with pytest.raises(ValueError):
        fit_walk(np.array(at_s), np.array(level))
