"""One measurement with all its uncertainties: first order and Monte Carlo."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.extinction import upper_limit
from analysis.reduce.two_port import TwoPortMeasurement, er_by_draws, er_db_of_sums, er_to_first_order, noise_bias_db
from tests.reference.values import close, reference

DARK = {"reading1": 100.0, "reading1_sigma": 0.1, "zero1": 0.5, "zero1_sigma": 0.01,
        "reading2": 0.62, "reading2_sigma": 0.01, "zero2": 0.5, "zero2_sigma": 0.01}  # fmt: skip
LEAKY = {"reading1": 0.98005, "reading2": 0.06995, "reading1_sigma": 1e-4, "reading2_sigma": 1e-4, "zero2_sigma": 2e-4,
         "gain_ratio": 1.1, "gain_ratio_sigma": 0.01, "leakage": [[0.98, 0.001], [0.02, 0.999]],
         "leakage_sigma": [[1e-3, 1e-4], [5e-4, 1e-3]]}  # fmt: skip


def test_uncertain_zeros():
    """T01-unc-03 (GUM first order; Monte Carlo with 2e6 draws in its notes)."""
    row = reference("T01-unc-03")
    np.testing.assert_allclose(er_to_first_order(TwoPortMeasurement(**DARK)).er_sigma_db, row["expected"], **close(row))


def test_first_order_against_the_uncertainties_library():
    """Lebigot's `uncertainties` (open library of linear error propagation) on the same model with all eight inputs."""
    library = pytest.importorskip("uncertainties")
    from uncertainties import umath

    m = LEAKY
    (a, b), (c, d) = [[library.ufloat(x, s) for x, s in zip(row, sigmas, strict=True)]
                      for row, sigmas in zip(m["leakage"], m["leakage_sigma"], strict=True)]  # fmt: skip
    v1 = library.ufloat(m["reading1"], m["reading1_sigma"])
    v2 = (library.ufloat(m["reading2"], m["reading2_sigma"]) - library.ufloat(0, m["zero2_sigma"])) * library.ufloat(1.1, 0.01)
    expected = 10 * umath.log10((d * v1 - b * v2) / (a * v2 - c * v1))
    found = er_to_first_order(TwoPortMeasurement(**m))
    np.testing.assert_allclose([found.er_db[0], found.er_sigma_db[0]], [expected.n, expected.s], rtol=1e-9)


def test_draws_agree_with_first_order_where_that_holds():
    measurement = TwoPortMeasurement(**LEAKY)
    first, drawn = er_to_first_order(measurement), er_by_draws(measurement, np.random.default_rng(1), draws=200_000)
    np.testing.assert_allclose(drawn.er_sigma_db, first.er_sigma_db[0], rtol=0.02)
    np.testing.assert_allclose(drawn.er_db, first.er_db[0], atol=0.01)
    assert not drawn.is_lower_bound and drawn.low_db < drawn.er_db < drawn.high_db


@pytest.mark.parametrize("net", [-1.0, 0.0, 1.0])
def test_draws_below_detection_give_the_bounded_gaussian_limit(net):
    """The physical draws alone are the flat prior of F-06: the same 95 % bound by another road."""
    measurement = TwoPortMeasurement(reading1=1e3, reading2=net, reading2_sigma=1.0)
    drawn = er_by_draws(measurement, np.random.default_rng(2), draws=400_000)
    expected = 10 * np.log10(1e3 / upper_limit(np.array(net), np.array(1.0)))
    assert drawn.is_lower_bound and np.isnan(drawn.er_sigma_db) and np.isnan(drawn.high_db)
    np.testing.assert_allclose(drawn.er_db, expected, atol=0.02)
    np.testing.assert_allclose(er_to_first_order(measurement).er_db, expected, rtol=1e-9)


def test_interval_covers_the_truth():
    """600 invented benches of 28 dB with wrong zeros, gains and leakages: the 90 % interval holds the truth in 90 of 100."""
    random = np.random.default_rng(3)
    matrix, sigma, leak = np.array([[0.98, 0.001], [0.002, 0.97]]), np.array([[1e-3, 1e-4], [2e-4, 1e-3]]), 10**-2.8
    hits = 0
    for _ in range(600):
        true_matrix = matrix + sigma * random.standard_normal((2, 2))
        seen = true_matrix @ [1.0, leak] / [1.0, 1.0 + 0.02 * random.standard_normal()] + 1e-4 * random.standard_normal(2)
        m = TwoPortMeasurement(reading1=seen[0], reading2=seen[1], reading1_sigma=1e-4, reading2_sigma=1e-4,
                               gain_ratio_sigma=0.02, leakage=matrix, leakage_sigma=sigma)  # fmt: skip
        found = er_by_draws(m, random, draws=1000, confidence=0.9)
        hits += bool(found.low_db <= 28.0 <= found.high_db)
    assert 0.86 < hits / 600 < 0.94


def test_same_seed_same_result_and_arrays():
    measurement = TwoPortMeasurement(reading1=np.ones(4), reading2=np.array([1e-2, 1e-3, np.nan, 1e-6]), reading2_sigma=1e-4)
    one, two = (er_by_draws(measurement, np.random.default_rng(9), draws=2000) for _ in range(2))
    np.testing.assert_array_equal(one.er_db, two.er_db)
    assert one.is_lower_bound.tolist() == [False, False, False, True]
    assert np.isnan(one.er_db[2]) and np.isfinite(one.er_db[[0, 1, 3]]).all()


def test_wanted_port_lost_in_its_noise_gives_no_ratio():
    found = er_by_draws(TwoPortMeasurement(reading1=0.0, reading1_sigma=1.0, reading2=50.0), np.random.default_rng(1))
    assert np.isnan(found.er_db) and not found.is_lower_bound


def test_wanted_port_2_turns_the_sign():
    one, two = (TwoPortMeasurement(reading1=1.0, reading2=0.01, reading2_sigma=1e-4, wanted_port=port) for port in (1, 2))
    np.testing.assert_allclose(er_to_first_order(one).er_db, -er_to_first_order(two).er_db)
    np.testing.assert_allclose(er_by_draws(two, np.random.default_rng(1)).er_db, -20.0, atol=0.01)


@pytest.mark.parametrize(("fields", "word"), [
    ({"wanted_port": 3}, "wanted_port=3"), ({"reading1_sigma": -1.0}, "reading1_sigma"),
    ({"leakage_sigma": [[0, -1], [0, 0]]}, "leakage"),
])  # fmt: skip
def test_impossible_measurements_are_refused(fields, word):
    with pytest.raises(ValueError, match=word):
        TwoPortMeasurement(reading1=1.0, reading2=0.1, **fields)


@pytest.mark.parametrize("wrong", [{"draws": 10}, {"confidence": 1.0}])
def test_draws_and_confidence_out_of_range_are_refused(wrong):
    with pytest.raises(ValueError, match=next(iter(wrong))):
        er_by_draws(TwoPortMeasurement(reading1=1.0, reading2=0.1), np.random.default_rng(1), **wrong)


def test_bias_of_averaged_decibels():
    """T01-bias-01, and the mean over a quarter million noisy readings."""
    row = reference("T01-bias-01")
    np.testing.assert_allclose(noise_bias_db(row["inputs"]["r_cross"]), row["expected"], **close(row))
    other = 1.0 + 0.1 * np.random.default_rng(4).standard_normal(250_000)
    np.testing.assert_allclose(np.mean(-10 * np.log10(other)), noise_bias_db(0.1), atol=0.003)


def test_average_of_20_and_40_db():
    """Job paper: 22.97 dB; a lost sample of either port leaves out the pair."""
    np.testing.assert_allclose(er_db_of_sums([1.0, 1.0], [1e-2, 1e-4]), 22.967, atol=5e-4)
    np.testing.assert_allclose(er_db_of_sums([1.0, 1.0, 5.0], [1e-2, 1e-4, np.nan]), 22.967, atol=5e-4)
    assert np.isnan(er_db_of_sums([1.0], [-1e-3]))


@given(st.floats(1e-3, 1.0), st.floats(1e-6, 1e-2), st.floats(1e-3, 1e3))
def test_a_brighter_source_changes_neither_er_nor_sigma(wanted, other, factor):
    one, two = (er_to_first_order(TwoPortMeasurement(reading1=f * wanted, reading2=f * other, reading2_sigma=f * other / 10))
                for f in (1.0, factor))  # fmt: skip
    np.testing.assert_allclose([one.er_db, one.er_sigma_db], [two.er_db, two.er_sigma_db], rtol=1e-9, atol=1e-9)
