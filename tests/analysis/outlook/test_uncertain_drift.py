"""First passage with an uncertain drift, held against quadrature, scipy's inverse Gaussian law and simulated walks."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.stats import invgauss, norm

from analysis.outlook.drifted_walk import passage_probability
from analysis.outlook.uncertain_drift import uncertain_passage_probability, uncertain_passage_quantile_s

distances, drifts = st.floats(0.2, 10.0), st.floats(-3.0, 3.0)
errors, spreads, times = st.floats(0.0, 2.0), st.floats(0.1, 3.0), st.floats(0.05, 20.0)


@given(distances, drifts, st.floats(0.05, 2.0), spreads, times)
def test_the_mean_over_drifts_by_quadrature(distance, drift, error, spread, time_s):
    def weighted(deviate):
        return passage_probability(distance, drift + error * deviate, spread, time_s) * norm.pdf(deviate)

    expected = quad(weighted, -9, 9, limit=200, points=[(distance / time_s - drift) / error] if
                    abs(distance / time_s - drift) < 9 * error else None)[0]
    assert float(uncertain_passage_probability(distance, drift, error, spread, time_s)) == pytest.approx(expected, abs=2e-6)


@given(distances, st.floats(0.1, 3.0), spreads, times)
def test_a_known_drift_is_the_inverse_gaussian_law_of_scipy(distance, drift, spread, time_s):
    shape = (distance / spread) ** 2
    expected = invgauss.cdf(time_s, mu=distance / drift / shape, scale=shape)
    assert float(uncertain_passage_probability(distance, drift, 0.0, spread, time_s)) == pytest.approx(expected, abs=1e-9)


@given(distances, drifts, errors, spreads, st.floats(0.05, 0.95))
def test_the_quantile_inverts_the_chance(distance, drift, error, spread, probability):
    found = float(uncertain_passage_quantile_s(distance, drift, error, spread, probability, 50.0))
    at_end = float(uncertain_passage_probability(distance, drift, error, spread, 50.0))
    if np.isinf(found):
        assert at_end < probability
    else:
        assert float(uncertain_passage_probability(distance, drift, error, spread, found)) == pytest.approx(probability, abs=1e-9)


def test_simulated_walks_pass_as_often():
    """Walks of 0.002 s steps with a drift drawn anew for each; a barrier seen in steps stands 0.5826 s √dt further out (F-97)."""
    rng, step_s, count = np.random.default_rng(11), 0.002, 4000
    drift = rng.normal(0.5, 0.4, count)
    place, top = np.zeros(count), np.zeros(count)
    for _ in range(round(2.0 / step_s)):
        place += drift * step_s + rng.normal(0.0, np.sqrt(step_s), count)
        top = np.maximum(top, place)
    expected = float(uncertain_passage_probability(1.5 + 0.5826 * np.sqrt(step_s), 0.5, 0.4, 1.0, 2.0))
    assert np.mean(top >= 1.5) == pytest.approx(expected, abs=4 * np.sqrt(0.25 / count))


def test_ends():
    assert float(uncertain_passage_probability(0.0, -1.0, 1.0, 1.0, 1.0)) == 1.0
    assert float(uncertain_passage_quantile_s(-1.0, -1.0, 1.0, 1.0, 0.5, 1.0)) == 0.0
    assert np.isnan(uncertain_passage_quantile_s(np.nan, 0.0, 0.0, 1.0, 0.5, 1.0))
    for probability, horizon_s in ((0.0, 1.0), (1.0, 1.0), (0.5, 0.0), (0.5, np.inf)):
        with pytest.raises(ValueError, match="must lie"):
            uncertain_passage_quantile_s(1.0, 0.0, 0.0, 1.0, probability, horizon_s)
