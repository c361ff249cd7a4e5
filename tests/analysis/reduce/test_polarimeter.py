"""Calibration of a polarimeter from known states."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis.extra import numpy as hnp

from analysis.reduce.polarimeter import calibrate_polarimeter, stokes_of_readings

TETRAHEDRON = np.array([[1, 1, 1, 1], [1, -1, -1, 1], [1, 1, -1, -1], [1, -1, 1, -1]]) / [1, *[np.sqrt(3)] * 3]
SIX = np.array([[1, 1, 0, 0], [1, -1, 0, 0], [1, 0, 1, 0], [1, 0, -1, 0], [1, 0, 0, 1], [1, 0, 0, -1]], float)


def instrument(random, channels=4):
    return 0.25 * np.concatenate([TETRAHEDRON, SIX])[:channels] * (1 + 0.05 * random.standard_normal((channels, 4)))


def test_best_states_have_the_known_condition_numbers():
    """sqrt 3 for a tetrahedron and for the six poles, the least of all sets (Tyo, Appl. Opt. 41, 619 (2002), from memory)."""
    for states in (TETRAHEDRON, SIX):
        found = calibrate_polarimeter(states, states @ TETRAHEDRON.T)
        np.testing.assert_allclose([found.state_condition, found.instrument_condition], np.sqrt(3))


@given(hnp.arrays(np.float64, (4,), elements={"min_value": -0.5, "max_value": 0.5}))
def test_an_exact_instrument_is_found_and_read(vector):
    true = instrument(np.random.default_rng(17), 6)
    calibration = calibrate_polarimeter(SIX, SIX @ true.T)
    np.testing.assert_allclose(calibration.instrument, true, atol=1e-12)
    stokes = np.array([1.0, *vector[:3]])
    np.testing.assert_allclose(stokes_of_readings(calibration, true @ stokes)[0], stokes, atol=1e-12)


def test_covariance_is_the_scatter_of_calibrations_and_readings():
    """4,000 calibrations, each with its own noise, each used once: the calibration's part included."""
    random = np.random.default_rng(18)
    true, stokes = instrument(random, 6), np.array([1.0, 0.5, -0.3, 0.6])
    states, sigma = np.concatenate([SIX, TETRAHEDRON]), np.linspace(2e-3, 5e-3, 6)
    found = []
    for _ in range(4000):
        readings = states @ true.T + sigma * random.standard_normal((10, 6))
        calibration = calibrate_polarimeter(states, readings, channel_sigma=sigma)
        found.append(stokes_of_readings(calibration, true @ stokes + sigma * random.standard_normal(6)))
    scatter = np.cov(np.array([one[0] for one in found]).T)
    stated = np.mean([one[1] for one in found], axis=0)
    np.testing.assert_allclose(stated, scatter, atol=0.06 * np.trace(scatter) / 4)
    alone = stokes_of_readings(calibration, true @ stokes, sigma=1e-9)[1]
    assert np.trace(alone) > 0.2 * np.trace(stated)  # what no averaging of readings takes away


def test_channel_noise_comes_from_the_residuals():
    random = np.random.default_rng(19)
    true = instrument(random)
    states = np.repeat(SIX, 200, axis=0)
    calibration = calibrate_polarimeter(states, states @ true.T + 0.01 * random.standard_normal((1200, 4)))
    np.testing.assert_allclose(calibration.channel_sigma, 0.01, rtol=0.1)
    assert np.isnan(calibrate_polarimeter(TETRAHEDRON, TETRAHEDRON @ true.T).channel_sigma).all()


def test_many_readings_at_once_and_lost_ones():
    true = instrument(np.random.default_rng(20))
    calibration = calibrate_polarimeter(SIX, SIX @ true.T)
    readings = np.stack([true @ SIX[0], np.full(4, np.nan)])
    stokes, covariance = stokes_of_readings(calibration, readings)
    np.testing.assert_allclose(stokes[0], SIX[0], atol=1e-12)
    assert np.isnan(stokes[1]).all() and covariance.shape == (2, 4, 4)


@pytest.mark.parametrize(("states", "readings", "word"), [
    (SIX[:4], np.ones((4, 4)), "cannot tell S3"), (SIX[:3], np.ones((3, 4)), "3 readings"),
    (SIX, SIX[:, :3], "3 readings"), (SIX, np.ones((5, 4)), "shape"),
])  # fmt: skip
def test_states_and_channels_that_cannot_tell_are_refused(states, readings, word):
    """Four states of the equator say nothing of S3."""
    with pytest.raises(ValueError, match=word):
        calibrate_polarimeter(states, readings)
