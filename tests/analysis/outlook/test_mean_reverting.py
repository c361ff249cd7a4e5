"""First passage of a process that turns back: Siegert's means, the limit of a walk, and a simulation."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.outlook.drifted_walk import passage_probability
from analysis.outlook.mean_reverting import mean_passage_s, reverting_passage
from tests.reference.values import close, references


@pytest.mark.parametrize("row", references("T08-ou"), ids=lambda row: row["id"])
def test_mean(row):
    """A. J. F. Siegert, Phys. Rev. 81, 617 (1951), from memory; values from mpmath, double integral, finite differences."""
    start, barrier = row["inputs"]["x0"], row["inputs"]["b"]
    np.testing.assert_allclose(mean_passage_s(start, barrier, 0.0, 1.0, 1.0), row["expected"], **close(row))
    assert reverting_passage(start, barrier, 0.0, 1.0, 1.0).mean_s == pytest.approx(row["expected"], rel=1e-6)


@settings(max_examples=20, deadline=None)
@given(st.floats(-3.0, 2.0), st.floats(0.02, 2.5), st.floats(1e-4, 10.0), st.floats(0.1, 10.0), st.floats(-5.0, 5.0))
def test_modes_and_integral_agree(start, ahead, rate, sd, mean):
    """Two routes to the mean: the sum over modes and Siegert's integral; both scale with rate and sd."""
    given_values = (mean + start * sd, mean + (start + ahead) * sd, mean, rate, sd)
    expected = float(mean_passage_s(*given_values))
    assert reverting_passage(*given_values).mean_s == pytest.approx(expected, rel=1e-5)
    assert expected == pytest.approx(float(mean_passage_s(start, start + ahead, 0.0, 1.0, 1.0)) / rate, rel=1e-6)


@pytest.mark.parametrize("drift", [0.0, 1.0, -0.5])
def test_slow_return_is_a_walk(drift):
    """θ → 0 with θ(μ - x0) kept: the drifted walk of F-95, to what is left of θ."""
    rate = 1e-5
    law = reverting_passage(0.0, 1.0, drift / rate, rate, np.sqrt(0.5 / rate))
    times = np.array([0.1, 0.5, 1.0, 5.0])
    np.testing.assert_allclose(law.probability(times), passage_probability(1.0, drift, 1.0, times), atol=1e-4)


def test_against_a_simulation():
    """20 000 paths of 400 exact steps of 0.01/θ, barrier moved in by 0.5826 σ √dt for the simulation's blindness."""
    rng = np.random.default_rng(4)
    level, has_passed = np.zeros(20_000), np.zeros(20_000, bool)
    barrier = 1.0 - 0.5826 * np.sqrt(2.0) * 0.1
    for _ in range(400):
        level = level * np.exp(-0.01) + rng.standard_normal(20_000) * np.sqrt(-np.expm1(-0.02))
        has_passed |= level >= barrier
    expected = float(reverting_passage(0.0, 1.0, 0.0, 1.0, 1.0).probability(4.0))
    assert has_passed.mean() == pytest.approx(expected, abs=0.015)


def test_quantiles_invert_and_stop_at_the_horizon():
    law = reverting_passage(0.0, 2.0, 0.0, 0.5, 1.0)
    times = law.quantile_s([0.1, 0.5], horizon_s=1000.0)
    np.testing.assert_allclose(law.probability(times), [0.1, 0.5], atol=1e-9)
    assert np.isinf(law.quantile_s(0.5, horizon_s=1.0))
    assert np.all(np.diff(law.probability(np.linspace(0.0, 40.0, 200))) >= 0.0)


def test_ends():
    assert mean_passage_s(2.0, 1.0, 0.0, 1.0, 1.0) == 0.0 and np.isinf(mean_passage_s(0.0, 60.0, 0.0, 1.0, 1.0))
    assert np.isnan(mean_passage_s(0.0, 1.0, 0.0, 0.0, 1.0)) and mean_passage_s([0.0, 0.5], 1.0, 0.0, 1.0, 1.0).shape == (2,)
    with pytest.raises(ValueError, match="start below the barrier"):
        reverting_passage(1.0, 1.0, 0.0, 1.0, 1.0)
    assert reverting_passage(0.0, 9.0, 0.0, 1.0, 1.0).probability(1.0) == 0.0
