"""CRPS against published closed forms, its own integral, and plain double sums."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.stats import norm

from analysis.outlook.crps import crps_ensemble, crps_ensemble_fair, crps_gaussian
from tests.reference.values import close, references

values = st.floats(-50, 50)


@pytest.mark.parametrize("row", references("T08-crps"), ids=lambda row: row["id"])
def test_gaussian(row):
    """T. Gneiting, A. E. Raftery, A. H. Westveld, T. Goldman, Mon. Weather Rev. 133, 1098 (2005), from memory."""
    given_values = row["inputs"]
    got = crps_gaussian(given_values["mu"], given_values["sigma"], given_values["y"])
    np.testing.assert_allclose(got, row["expected"], **close(row))


@pytest.mark.parametrize(("mean", "sigma", "observed"), [(0.0, 1.0, 0.7), (2.0, 0.5, 4.0), (-1.0, 3.0, -1.5)])
def test_definition(mean, sigma, observed):
    """∫ (F(x) - 1{x ≥ y})² dx by quadrature."""
    below = quad(lambda x: norm.cdf(x, mean, sigma) ** 2, -np.inf, observed)[0]
    above = quad(lambda x: norm.sf(x, mean, sigma) ** 2, observed, np.inf)[0]
    assert float(crps_gaussian(mean, sigma, observed)) == pytest.approx(below + above, rel=1e-7)


def test_a_sure_forecast_scores_its_error():
    assert float(crps_gaussian(3.0, 0.0, 5.0)) == 2.0 and np.isnan(crps_gaussian(np.nan, 1.0, 0.0))
    with pytest.raises(ValueError, match="sigma"):
        crps_gaussian(0.0, -1.0, 0.0)


@settings(deadline=None)
@given(st.lists(values, min_size=2, max_size=12), values)
def test_ensembles_are_plain_double_sums(members, observed):
    x = np.array(members)
    pairs = np.abs(x[:, None] - x[None]).sum()
    distance = np.abs(x - observed).mean()
    assert float(crps_ensemble(x, observed)) == pytest.approx(distance - pairs / (2 * len(x) ** 2), abs=1e-9)
    assert float(crps_ensemble_fair(x, observed)) == pytest.approx(distance - pairs / (2 * len(x) * (len(x) - 1)), abs=1e-9)


@settings(deadline=None)
@given(st.lists(values, min_size=1, max_size=8), values)
def test_plain_ensemble_is_the_integral_over_its_steps(members, observed):
    """∫ (F_M - 1{x ≥ y})² dx, summed between the jumps."""
    at = np.sort(np.append(members, observed))
    share = np.searchsorted(np.sort(members), at[:-1], side="right") / len(members)
    expected = np.sum((share - (at[:-1] >= observed)) ** 2 * np.diff(at))
    assert float(crps_ensemble(members, observed)) == pytest.approx(expected, abs=1e-9)


def test_fair_score_of_many_small_ensembles_is_that_of_their_law():
    """Mean over 20 000 ensembles of 3 from N(0, 1) at y = 0.4; plain adds E|x - x'|/(2 M) = 1/(3 √π)."""
    members = np.random.default_rng(11).standard_normal((20_000, 3))
    observed = np.full(20_000, 0.4)
    fair, plain = (score(members, observed) for score in (crps_ensemble_fair, crps_ensemble))
    law = float(crps_gaussian(0.0, 1.0, 0.4))
    assert abs(fair.mean() - law) < 4.0 * fair.std() / np.sqrt(len(fair))
    assert abs(plain.mean() - law - 1.0 / (3.0 * np.sqrt(np.pi))) < 4.0 * plain.std() / np.sqrt(len(plain))


def test_one_member_is_an_error_only_for_the_fair_score():
    assert float(crps_ensemble([2.0], 5.0)) == 3.0
    with pytest.raises(ValueError, match="at least 2"):
        crps_ensemble_fair([2.0], 5.0)
