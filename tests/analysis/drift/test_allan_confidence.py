"""Degrees of freedom, intervals and slopes of Allan deviations."""

import allantools
import numpy as np
import pytest

from analysis.drift.allan_confidence import Noise, confidence_of, deviation_interval, edf, slopes
from analysis.drift.allan_curve import modified_allan_deviation, overlapping_allan_deviation
from tests.reference.values import close, reference, references

KINDS = {Noise.ANTICORRELATED: lambda e: np.diff(e, axis=0), Noise.WHITE: lambda e: e,
         Noise.RANDOM_WALK: lambda e: np.cumsum(e, axis=0)}


@pytest.mark.parametrize("row", references("T04-edf-"), ids=lambda row: row["id"])
def test_exact_degrees_of_freedom(row):
    """Gaussian quadratic form, (tr C)²/tr C², computed apart with full matrices and checked by Monte Carlo."""
    kind = Noise.WHITE if "white" in row["id"] else Noise.RANDOM_WALK
    n, m = row["inputs"]["n_level_readings"], row["inputs"]["m"]
    np.testing.assert_allclose(edf(kind, n - 2 * m + 1, m), row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T04-edfs-white"), ids=lambda row: row["id"])
def test_simple_formula_of_the_handbook_is_near(row):
    """NIST SP 1065 (2008), simple form: an approximation, within 2 % of the exact one."""
    m, count = row["inputs"]["m"], row["inputs"]["N_phase_points"] - 1
    np.testing.assert_allclose(edf(Noise.WHITE, count - 2 * m + 1, m), row["expected"], rtol=0.02)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("function", [overlapping_allan_deviation, modified_allan_deviation])
def test_simulation_agrees(kind, function):
    """edf = 2 mean²/variance of the squared deviation, over 8000 records of 120; its own error is about 3 %."""
    level = KINDS[kind](np.random.default_rng(1).standard_normal((120, 8000)))
    curve = function(level, 1.0, np.array([8]))
    square = curve.deviation[0] ** 2
    expected = edf(kind, int(curve.terms[0]), 8, modified=curve.modified)
    np.testing.assert_allclose(2.0 * square.mean() ** 2 / square.var(), expected, rtol=0.08)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("modified", [False, True])
def test_scaling_above_256_changes_next_to_nothing(kind, modified):
    """Just below and above the bound, at equal ratios of record and factor."""
    np.testing.assert_allclose(edf(kind, 5120, 512, modified=modified) if kind is not Noise.ANTICORRELATED or modified else 1.0,
                               edf(kind, 2560, 256, modified=modified) if kind is not Noise.ANTICORRELATED or modified else 1.0,
                               rtol=1e-3)
    exact = edf(kind, 2000, 200, modified=modified)
    if kind is not Noise.ANTICORRELATED or modified:
        np.testing.assert_allclose(edf(kind, 3000, 300, modified=modified), exact, rtol=1e-3)


def test_interval_of_a_known_case_and_of_allantools():
    row = reference("T04-ci-01")
    x = row["inputs"]
    np.testing.assert_allclose(deviation_interval(x["adev"], x["edf"], x["confidence"]), row["expected"], **close(row))
    low, high = deviation_interval(2.0, 31.4, 0.68)
    np.testing.assert_allclose([low, high], allantools.confidence_interval(2.0, 31.4, ci=0.68), rtol=1e-9)


@pytest.mark.parametrize(("kind", "slope"), [(Noise.WHITE, -0.5), (Noise.RANDOM_WALK, 0.5), (Noise.ANTICORRELATED, -1.0)])
def test_kind_of_noise_by_its_slope_and_interval_that_holds_the_truth(kind, slope):
    """Slopes of NIST SP 1065, sec. 3, from memory; σ(τ) of white noise is 1/√m."""
    level = KINDS[kind](np.random.default_rng(2).standard_normal(50_000))
    found = confidence_of(overlapping_allan_deviation(level, 1.0, 2 ** np.arange(9)))
    assert set(found.noise[1:]) == {kind}
    np.testing.assert_allclose(found.slope[2:-1], slope, atol=0.12)
    if kind is Noise.WHITE:
        truth = 2.0 ** (-0.5 * np.arange(9))
        assert ((found.low < truth) & (truth < found.high)).sum() >= 8


def test_flicker_and_drift_are_told():
    drift = confidence_of(overlapping_allan_deviation(np.arange(1000.0), 1.0))
    assert set(drift.noise) == {Noise.DRIFT}
    flat = slopes(np.array([1.0, 2.0, 4.0]), np.array([3.0, 3.0, 3.0]))
    np.testing.assert_allclose(flat, 0.0, atol=1e-15)
    pink = confidence_of(overlapping_allan_deviation(allantools.noise.pink(2**14), 1.0, 2 ** np.arange(2, 9)))
    assert pink.noise.count(Noise.FLICKER) >= 5


def test_unknown_points_and_faults():
    single = confidence_of(overlapping_allan_deviation(np.array([1.0, 3.0]), 1.0))
    assert single.noise == (Noise.UNKNOWN,) and single.edf[0] == pytest.approx(1.0)
    assert np.isnan(edf(Noise.WHITE, 0, 1))
    with pytest.raises(ValueError, match="component"):
        confidence_of(overlapping_allan_deviation(np.ones((9, 2)), 1.0))
    with pytest.raises(ValueError, match="noise"):
        edf(Noise.FLICKER, 10, 1)
    with pytest.raises(ValueError, match="m="):
        edf(Noise.WHITE, 10, 0)
    with pytest.raises(ValueError, match="level"):
        deviation_interval(1.0, 10.0, 0.0)
