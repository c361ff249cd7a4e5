"""Extinction ratio, its uncertainty and its bounds."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import truncnorm

from analysis.reduce.extinction import extinction, upper_limit
from analysis.reduce.trust import Reason
from tests.reference.values import close, reference, references
from tests.strategies import powers_w


def one(wanted, other, wanted_sigma=0.0, other_sigma=0.0, covariance=0.0):
    found = extinction(*(np.array([float(x)]) for x in (wanted, other, wanted_sigma, other_sigma)), covariance)
    return found.er_db[0], found


@pytest.mark.parametrize("row", references("T01-er-0"), ids=lambda row: row["id"])
def test_ratio_of_two_powers(row):
    er_db, _ = one(row["inputs"]["P_par_mW"], row["inputs"]["P_cross_mW"])
    np.testing.assert_allclose(er_db, row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T01-floor-0"), ids=lambda row: row["id"])
def test_upper_limit_of_a_power_that_cannot_be_negative(row):
    """Particle Data Group, Review of Particle Physics, "Statistics", bounded Gaussian (from memory)."""
    found = upper_limit(np.array([row["inputs"]["net_over_sigma"] * 2e-9]), np.array([2e-9]))
    np.testing.assert_allclose(found / 2e-9, row["expected"], **close(row))


@given(st.floats(-5.0, 3.0))
def test_upper_limit_is_the_quantile_of_the_truncated_normal(score):
    """The same by another road: scipy's truncated normal on P >= 0, 95 % point."""
    expected = truncnorm.ppf(0.95, -score, np.inf, loc=score, scale=1.0)
    np.testing.assert_allclose(upper_limit(np.array([score]), np.array([1.0])), expected, rtol=1e-6)


@given(st.floats(-35.0, 8.0), st.floats(0.001, 2.0))
def test_upper_limit_is_above_zero_and_rises_with_the_reading(score, more):
    low, high = upper_limit(np.array([score, score + more]), np.ones(2))
    assert 0.0 < low < high


def test_job_floor_example_is_a_bound_of_57_db():
    """Job paper: dark port at its zero with 1 nW noise under 1 mW -> at least 57.1 dB (95 %)."""
    er_db, found = one(1e-3, 0.0, 1e-9, 1e-9)
    np.testing.assert_allclose(er_db, 57.1, atol=0.05)
    assert found.is_lower_bound[0] and not found.is_upper_bound[0] and found.reasons[0] == Reason.FLOOR
    assert np.isnan(found.er_sigma_db[0])


def test_detected_from_1_645_sigma_on():
    """L. A. Currie, Anal. Chem. 40, 586 (1968): decision threshold 1.645 sigma of the net."""
    threshold = reference("T01-floor-currie")["expected"]["L_C"]
    found = extinction(np.full(2, 1e-3), np.array([threshold - 1e-6, threshold + 1e-6]) * 1e-9, np.zeros(2), np.full(2, 1e-9))
    assert found.is_lower_bound.tolist() == [True, False]
    np.testing.assert_allclose(found.er_db[1], 10 * np.log10(1e-3 / (threshold * 1e-9)), atol=1e-4)


def test_bound_covers_the_truth_in_95_of_100():
    """Monte Carlo: true dark powers spread evenly over small values; the bound must not be passed by more than 5 % of them."""
    rng = np.random.default_rng(20)
    true = rng.uniform(0.0, 4.0, 200_000)
    seen = true + rng.normal(size=true.size)
    weak = seen < 1.645
    passed = np.mean(true[weak] > upper_limit(seen[weak], np.ones(weak.sum())))
    assert 0.045 < passed < 0.053


def test_wanted_port_at_floor_gives_an_upper_bound():
    er_db, found = one(0.0, 1e-3, 1e-9, 1e-9)
    np.testing.assert_allclose(er_db, -57.08, atol=0.01)
    assert found.is_upper_bound[0] and not found.is_lower_bound[0]


def test_both_ports_dark_give_no_ratio():
    er_db, found = one(2.9e-9, -1e-9, 1e-9, 1e-9)
    assert np.isnan(er_db) and found.reasons[0] == Reason.DARK
    assert not found.is_lower_bound[0] and not found.is_upper_bound[0]


@pytest.mark.parametrize(("other", "sigma"), [(0.0, 0.0), (-1e-7, 0.0), (-6e-9, 1e-9)])
def test_net_not_above_zero_never_becomes_a_number(other, sigma):
    """Without a known floor there is no bound; five sigma below zero the zero itself is wrong."""
    er_db, found = one(1e-3, other, sigma, sigma)
    assert np.isnan(er_db) and found.reasons[0] == Reason.NEGATIVE


def test_lost_readings_are_undefined():
    found = extinction(np.array([np.nan, np.inf, 1.0]), np.array([1.0, 1.0, np.nan]), np.zeros(3), np.zeros(3))
    assert np.isnan(found.er_db).all() and (found.reasons == Reason.UNDEFINED).all()


def test_uncertainty_with_dark_readings():
    """JCGM 100:2008, first order; value checked by Monte Carlo with 2e6 draws (T01-unc-03)."""
    row = reference("T01-unc-03")
    x = row["inputs"]
    _, found = one(
        x["raw_par_uW"] - x["dark_par_uW"],
        x["raw_cross_uW"] - x["dark_cross_uW"],
        np.hypot(x["u_raw_par"], x["u_dark_par"]),
        np.hypot(x["u_raw_cross"], x["u_dark_cross"]),
    )
    np.testing.assert_allclose(found.er_sigma_db, row["expected"], **close(row))


def test_uncertainty_with_correlated_readings():
    """Common noise cancels in the ratio (T01-unc-02)."""
    row = reference("T01-unc-02")
    u1, u2, rho = row["inputs"]["rel_u_par"], row["inputs"]["rel_u_cross"], row["inputs"]["rho"]
    _, found = one(1.0, 1.0, u1, u2, rho * u1 * u2)
    np.testing.assert_allclose(found.er_sigma_db, row["expected"], **close(row))


def test_unknown_noise_gives_no_uncertainty():
    assert np.isnan(one(1.0, 1e-3)[1].er_sigma_db[0])


@given(powers_w, powers_w)
def test_exchanged_ports_change_the_sign(wanted, other):
    np.testing.assert_allclose(one(wanted, other)[0], -one(other, wanted)[0], rtol=0, atol=1e-9)


@given(powers_w, powers_w, st.floats(1e-3, 1e3))
def test_a_brighter_source_changes_nothing(wanted, other, factor):
    np.testing.assert_allclose(one(factor * wanted, factor * other)[0], one(wanted, other)[0], rtol=0, atol=1e-9)


@given(st.floats(1e-3, 4.0), st.floats(1e-12, 1e-6))
def test_a_bound_never_claims_more_than_the_reading(score, sigma):
    """The bound of a weak reading is below the ratio that the reading itself would give."""
    er_db, found = one(1e-3, score * sigma, 0.0, sigma)
    assert found.is_lower_bound[0] == (score < 1.6448536269514722)
    plain_db = 10 * np.log10(1e-3 / (score * sigma))
    assert er_db < plain_db if found.is_lower_bound[0] else er_db == pytest.approx(plain_db, abs=1e-9)
