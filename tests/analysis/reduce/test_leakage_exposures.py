"""A splitter's leakage from two exposures: back to a known matrix, and its uncertainty against another library."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.leakage_exposures import EVEN_SIGMA, SeenShare, leakage_from_exposures, seen_share

shares = st.floats(0.0, 0.2)


def seen_of(matrix, light1, light2):
    """Shares in the wrong port, by matrix product alone."""
    one, two = np.asarray(matrix) @ light1, np.asarray(matrix) @ light2
    return one[1] / one.sum(), two[0] / two.sum()


@given(shares, shares)
def test_pure_light_gives_the_splitter_back(c, b):
    matrix = [[1 - c, b], [c, 1 - b]]
    x, y = seen_of(matrix, [1.0, 0.0], [0.0, 3.0])
    found = leakage_from_exposures(SeenShare(x, 0.0), SeenShare(y, 0.0))
    np.testing.assert_allclose(found.matrix, matrix, rtol=0, atol=1e-12)
    np.testing.assert_array_equal(found.sigma, 0.0)


@given(st.floats(0.002, 0.2), st.floats(0.002, 0.2), st.floats(27.0, 60.0))
def test_light_of_half_the_allowed_share_gives_it_back_too(c, b, er_db):
    """The middle of what is possible: p = half of 1/(1 + 10^(ER/10)), by matrix product."""
    matrix = [[1 - c, b], [c, 1 - b]]
    p = 0.5 / (1.0 + 10.0 ** (er_db / 10.0))
    x, y = seen_of(matrix, [1 - p, p], [p, 1 - p])
    found = leakage_from_exposures(SeenShare(x, 0.0), SeenShare(y, 0.0), light_er_db=er_db)
    np.testing.assert_allclose(found.matrix, matrix, rtol=0, atol=1e-12)


def test_uncertainty_against_the_uncertainties_library():
    """Lebigot's `uncertainties` (open library of linear error propagation) through numpy's own matrix inverse by hand:
    M = S K^-1, columns of both adding up to 1."""
    library = pytest.importorskip("uncertainties")
    er_db, x, y = 25.0, SeenShare(0.012, 3e-4), SeenShare(0.03, 2e-4)
    most = 1.0 / (1.0 + 10.0 ** (er_db / 10.0))
    p, q = (library.ufloat(most / 2, most * EVEN_SIGMA) for _ in range(2))
    ux, uy = (library.ufloat(one.share, one.sigma) for one in (x, y))
    left = (1 - p) * (1 - q) - p * q
    inverse = [[(1 - q) / left, -q / left], [-p / left, (1 - p) / left]]
    seen = [[1 - ux, uy], [ux, 1 - uy]]
    c = seen[1][0] * inverse[0][0] + seen[1][1] * inverse[1][0]
    b = seen[0][0] * inverse[0][1] + seen[0][1] * inverse[1][1]
    found = leakage_from_exposures(x, y, light_er_db=er_db)
    np.testing.assert_allclose([found.matrix[1, 0], found.matrix[0, 1]], [c.nominal_value, b.nominal_value], rtol=1e-12)
    np.testing.assert_allclose([found.sigma[1, 0], found.sigma[0, 1]], [c.std_dev, b.std_dev], rtol=1e-9)


def test_a_poor_polarizer_never_makes_the_leakage_negative():
    found = leakage_from_exposures(SeenShare(1e-4, 0.0), SeenShare(0.0, 1e-6), light_er_db=20.0)
    assert found.matrix[1, 0] == pytest.approx(0.5e-4, rel=1e-3)
    assert found.sigma[1, 0] == pytest.approx(1e-4 / np.sqrt(12.0), rel=1e-3)
    assert found.matrix[0, 1] == pytest.approx(0.0, abs=1e-12)


def test_flicker_that_both_ports_share_costs_nothing():
    """A ratio estimator: with dark = s bright exactly, its error is the zero's alone."""
    bright = 1e-3 * (1.0 + 0.1 * np.random.default_rng(4).normal(size=200))
    found = seen_share(bright, 0.01 * bright, dark_zero_sigma=1e-9)
    assert found.share == pytest.approx(0.01 / 1.01, rel=1e-12)
    assert found.sigma == pytest.approx(1e-9 / bright.mean() / 1.01**2, rel=1e-6)


def test_the_stated_error_covers_the_truth():
    """White noise on the dark port, 2,000 exposures of 60 readings: 68.3 % within 1 sigma for normal errors; batch means
    of eight know their own spread only roughly, and are never below the error of independent readings."""
    rng = np.random.default_rng(9)
    found = [seen_share(np.ones(60), 0.01 + 1e-4 * rng.normal(size=60)) for _ in range(2000)]
    inside = np.mean([abs(one.share - 0.01 / 1.01) < one.sigma for one in found])
    assert 0.66 < inside < 0.80


@pytest.mark.parametrize("er_db", [0.0, -3.0])
def test_what_cannot_be_is_refused(er_db):
    with pytest.raises(ValueError, match="light_er_db"):
        leakage_from_exposures(SeenShare(0.01, 0.0), SeenShare(0.01, 0.0), light_er_db=er_db)
    with pytest.raises(ValueError, match="wrong port"):
        leakage_from_exposures(SeenShare(0.6, 0.0), SeenShare(0.01, 0.0))
    with pytest.raises(ValueError, match="meant port is lit"):
        seen_share(np.zeros(20), np.ones(20))
