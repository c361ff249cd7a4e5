"""Cosines of temperature fitted at many periods at once."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.drift.arc_cells import CHI2_95, HALF_ARCS_RAD, ArcCells, crest_band

PLACE = np.linspace(-1.0, 1.0, 901)


def cells_of(level, level_noise=0.0, place_noise=0.0, place=PLACE):
    return ArcCells.of(place, level, (level_noise**2, 0.0), place_noise**2)


@settings(max_examples=30)
@given(st.floats(0.3, 6.0), st.floats(-1, 1), st.floats(-1, 1), st.floats(-1, 1))
def test_a_pure_cosine_is_found_again(arc, a, b, c):
    fits = cells_of(a + b * np.cos(arc * PLACE) + c * np.sin(arc * PLACE)).fit(np.array([arc]))
    curve = fits.curve(0, PLACE)
    true = a + b * np.cos(arc * PLACE) + c * np.sin(arc * PLACE)
    np.testing.assert_allclose(curve, true, atol=5e-4 * (abs(b) + abs(c)) + 1e-12)


def test_plain_fit_is_linear_least_squares():
    """numpy.linalg.lstsq on the readings themselves, one reading per cell."""
    place = np.linspace(-1, 1, 30)
    level = np.random.default_rng(0).normal(size=30)
    fits = cells_of(level, place=place).fit(np.array([1.3]))
    design = np.stack([np.ones(30), np.cos(1.3 * place), np.sin(1.3 * place)], axis=1)
    expected, squares, *_ = np.linalg.lstsq(design, level, rcond=None)
    np.testing.assert_allclose([fits.a[0], fits.b[0], fits.c[0]], expected, rtol=1e-9)
    np.testing.assert_allclose(fits.squares, squares, rtol=1e-9)
    slope = np.array([1.0, *(expected[1:] / np.hypot(*expected[1:]))])
    np.testing.assert_allclose(fits.crest_variance[0], slope @ np.linalg.inv(design.T @ design) @ slope, rtol=1e-8)


def test_squares_split_into_within_and_between():
    level = np.random.default_rng(1).normal(size=len(PLACE))
    cells = cells_of(level)
    assert cells.squares_about_mean == pytest.approx(np.sum((level - level.mean()) ** 2), rel=1e-12)
    assert cells.readings == len(level) and cells.within.min() >= 0.0


def test_noisy_places_no_longer_bias_the_arc():
    """Errors in the variable: the plain fit's arc comes out too long or short, effective variances bring it back."""
    random = np.random.default_rng(2)
    true = np.sin(np.linspace(0, 400, 40_000))
    level = 1.0 + np.cos(0.9 * true + 0.7) + 0.01 * random.normal(size=len(true))
    cells = cells_of(level, 0.01, 0.04, true + 0.04 * random.normal(size=len(true)))
    plain = cells.fit(np.linspace(0.5, 1.5, 201))
    mended = cells.refit(plain)
    bias = [abs(fits.arc_rad[np.argmin(fits.squares)] - 0.9) for fits in (plain, mended)]
    assert bias[1] < 0.5 * bias[0]
    assert cells_of(level, 0.01, 0.0, true).refit(plain) is plain


def test_band_is_open_where_the_shortest_arc_fits():
    fits = cells_of(PLACE**2).fit(HALF_ARCS_RAD)
    low, high, *_ = crest_band([fits], float(fits.squares.min()), 1.0)
    assert (low, high) == (-np.inf, np.inf)
    assert crest_band([fits], float(fits.squares.min()) - 1e9, 1.0)[0] == np.inf


def test_chi_square_point_is_the_square_of_the_normal_one():
    assert CHI2_95 == pytest.approx(1.959963984540054**2, rel=1e-12)


def test_far_outliers_do_not_cost_memory():
    place = np.append(PLACE, 1e6)
    assert len(cells_of(np.ones(len(place)), place=place).place) < 200
