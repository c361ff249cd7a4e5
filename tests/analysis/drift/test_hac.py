"""Regression with errors that allow for autocorrelation."""

import numpy as np
import pytest
import statsmodels.api as sm

from analysis.drift.hac import long_run_products, regress
from tests.reference.generator import uniforms
from tests.reference.values import close, reference


def hac_series():
    """The temperature and level of T07-hac-ols."""
    g, k = uniforms(180), np.arange(80)
    temperature = 20 + 2 * np.sin(2 * np.pi * k / 24) + 0.5 * (2 * g[:80] - 1)
    noise = np.zeros(80)
    for i in range(80):
        noise[i] = 0.7 * (noise[i - 1] if i else 0.0) + 0.3 * (2 * g[100 + i] - 1)
    return temperature, 30 - 0.4 * temperature + noise


def design_of(temperature):
    return np.stack([np.ones(len(temperature)), temperature], axis=1)


def test_slope_and_its_errors():
    row = reference("T07-hac-ols")
    temperature, level = hac_series()
    expected, number = row["expected"], np.arange(80)
    newey_west = regress(number, design_of(temperature), level, lags=4, corrects_small_sample=False)
    white = regress(number, design_of(temperature), level, lags=0, corrects_small_sample=False)
    found = [*newey_west.coefficient, white.standard_error[1], newey_west.standard_error[1]]
    wanted = [expected[name] for name in ("intercept", "slope", "se_HC0", "se_NW4")]
    np.testing.assert_allclose(found, wanted, **close(row))


def macro():
    """US macro data of T07-hac-macro-small."""
    table = sm.datasets.macrodata.load_pandas().data
    growth = 400 * np.diff(np.log(table[["realinv", "realgdp"]].to_numpy()), axis=0)
    design = np.stack([growth[:, 1], table["realint"].to_numpy()[:-1], np.ones(len(growth))], axis=1)
    return design, growth[:, 0]


def test_another_programs_errors_on_macro_data():
    row = reference("T07-hac-macro-small")
    design, level = macro()
    found = regress(np.arange(len(level)), design, level, lags=row["inputs"]["L"])
    np.testing.assert_allclose(found.coefficient, row["expected"]["coef"], **close(row))
    np.testing.assert_allclose(found.standard_error, row["expected"]["se"], **close(row))


def test_r_squared_is_statsmodels_own():
    design, level = macro()
    found = regress(np.arange(len(level)), design, level)
    assert found.r_squared == pytest.approx(sm.OLS(level, design).fit().rsquared, rel=1e-10)


def test_gaps_are_not_closed_up():
    """The series with bins missing equals a dense series whose missing scores are zero (statsmodels' own sum)."""
    score = np.random.default_rng(0).normal(size=(60, 2))
    keep = np.random.default_rng(1).random(60) < 0.7
    dense = np.where(keep[:, None], score, 0.0)
    expected = sm.stats.sandwich_covariance.S_hac_simple(dense, nlags=5)
    np.testing.assert_allclose(long_run_products(np.flatnonzero(keep), score[keep], 5), expected, rtol=1e-10)
    assert np.linalg.eigvalsh(expected).min() > 0


def test_wrong_designs_are_refused():
    number, level = np.arange(5), np.arange(5.0)
    with pytest.raises(ValueError, match="more rows"):
        regress(number[:2], np.ones((2, 2)), level[:2])
    with pytest.raises(ValueError, match="rank 1"):
        regress(number, np.ones((5, 2)), level)
