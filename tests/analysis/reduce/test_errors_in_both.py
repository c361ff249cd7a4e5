"""Lines through points with errors in both coordinates."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.errors_in_both import deming_line, known_noise_line

# K. Pearson, Phil. Mag. 2, 559 (1901); data read as printed in the documentation of scipy.odr
PEARSON_X = np.array([0.0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4])
PEARSON_Y = np.array([5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5])


def test_pearsons_line_of_closest_fit():
    """Pearson's own result, y = 5.784 - 0.5456 x (from memory)."""
    line = deming_line(PEARSON_X, PEARSON_Y, noise_ratio=1.0)
    np.testing.assert_allclose([line.slope, line.intercept], [-0.5456, 5.784], atol=5e-4)


@pytest.mark.parametrize("ratio", [0.01, 0.25, 1.0, 9.0])
def test_against_odrpack(ratio):
    """ODRPACK (Boggs, Byrd, Rogers, Schnabel), the reference code of orthogonal distance regression."""
    odrpack = pytest.importorskip("odrpack")
    found = odrpack.odr_fit(lambda x, beta: beta[0] + beta[1] * x, PEARSON_X, PEARSON_Y, beta0=np.array([6.0, -0.5]),
                            weight_x=1.0, weight_y=1.0 / ratio)  # fmt: skip
    line = deming_line(PEARSON_X, PEARSON_Y, noise_ratio=ratio)
    np.testing.assert_allclose([line.intercept, line.slope], found.beta, rtol=1e-5)  # its own stopping tolerance


def invented(random, slope=0.8, sigma_x=0.5, sigma_y=0.7, count=300):
    true = random.normal(2.0, 1.0, count)
    return true + sigma_x * random.standard_normal(count), 1.0 + slope * true + sigma_y * random.standard_normal(count)


@pytest.mark.parametrize("fit", [
    lambda x, y: deming_line(x, y, noise_ratio=0.49 / 0.25), lambda x, y: known_noise_line(x, y, x_sigma=0.5),
])  # fmt: skip
def test_unbiased_with_the_scatter_it_states(fit):
    """2,000 invented sets: the mean is the truth, the scatter is the stated sigma; least squares reads 20 % low."""
    random = np.random.default_rng(10)
    lines = [fit(*invented(random)) for _ in range(2000)]
    slopes, intercepts = np.array([line.slope for line in lines]), np.array([line.intercept for line in lines])
    np.testing.assert_allclose([slopes.mean(), intercepts.mean()], [0.8, 1.0], atol=0.02)
    np.testing.assert_allclose(np.median([line.slope_sigma for line in lines]), slopes.std(), rtol=0.08)
    np.testing.assert_allclose(np.median([line.intercept_sigma for line in lines]), intercepts.std(), rtol=0.08)
    x, y = invented(random, count=100_000)
    assert np.polyfit(x, y, 1)[0] < 0.66


def test_scatter_of_another_kind_spoils_deming_but_not_the_known_noise():
    random = np.random.default_rng(11)
    x, y = invented(random, sigma_y=3.0, count=200_000)
    assert deming_line(x, y, noise_ratio=0.49 / 0.25).slope > 1.2
    np.testing.assert_allclose(known_noise_line(x, y, x_sigma=0.5).slope, 0.8, atol=0.03)


@given(st.floats(-5.0, 5.0).filter(lambda s: abs(s) > 1e-3), st.floats(-5.0, 5.0), st.floats(0.01, 100.0))
def test_points_on_a_line(slope, intercept, ratio):
    x = np.array([0.0, 1.0, 2.0, np.nan, 5.0])
    y = intercept + slope * x
    for line in (deming_line(x, y, noise_ratio=ratio), known_noise_line(x, y, x_sigma=0.0)):
        np.testing.assert_allclose([line.slope, line.intercept], [slope, intercept], rtol=1e-9, atol=1e-9)
        assert line.count == 4 and line.slope_sigma < 1e-6


@given(st.floats(0.1, 10.0))
def test_exchanging_x_and_y_inverts_the_slope(ratio):
    """Least squares does not: the line must not depend on which port is called x."""
    one, other = deming_line(PEARSON_X, PEARSON_Y, noise_ratio=ratio), deming_line(PEARSON_Y, PEARSON_X, noise_ratio=1 / ratio)
    np.testing.assert_allclose(one.slope * other.slope, 1.0, rtol=1e-9)


@pytest.mark.parametrize(("call", "word"), [
    (lambda: deming_line(PEARSON_X, PEARSON_Y, noise_ratio=0.0), "noise_ratio"),
    (lambda: deming_line(np.array([-1.0, 0.0, 1.0]), np.array([1.0, 0.0, 1.0]), noise_ratio=1.0), "vary together"),
    (lambda: deming_line(PEARSON_X, PEARSON_Y[:3], noise_ratio=1.0), "shape"),
    (lambda: deming_line(np.array([1.0, np.nan, 2.0]), np.ones(3), noise_ratio=1.0), "2 pairs"),
    (lambda: known_noise_line(PEARSON_X, PEARSON_Y, x_sigma=10.0), "no more than its noise"),
    (lambda: known_noise_line(PEARSON_X, PEARSON_Y, x_sigma=-1.0), "x_sigma"),
])  # fmt: skip
def test_lines_that_cannot_be_are_refused(call, word):
    with pytest.raises(ValueError, match=word):
        call()
