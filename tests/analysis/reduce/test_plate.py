"""Calibration of a rotating plate."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.plate import calibrate_plate
from analysis.reduce.scan import plate_matrix, stokes_of_plate_scan
from tests.reference.values import reference

STATES = np.array([[1, 1, 0, 0], [1, 0, 1, 0], [1, 0.6, 0, 0.8]])
TWELVE_RAD = np.radians(np.arange(12) * 15.0)


def scans(retardance, offset, gain=1.0, states=STATES):
    return gain * states @ plate_matrix(TWELVE_RAD, retardance, offset).T


@given(st.floats(0.3, 2.9), st.floats(-1.55, 1.55), st.floats(0.01, 100.0))
def test_any_plate_is_found(retardance, offset, gain):
    found = calibrate_plate(TWELVE_RAD, STATES, scans(retardance, offset, gain))
    np.testing.assert_allclose([found.retardance_rad, found.offset_rad], [retardance, offset], atol=1e-6)
    np.testing.assert_allclose(found.gain, gain, rtol=1e-6)


def test_the_reference_plate():
    """T03-gen-int: retardance 100 deg, offset 3 deg; one elliptical state is enough."""
    x = reference("T03-gen-int")
    found = calibrate_plate(np.radians(x["inputs"]["reading_deg"]), [x["inputs"]["S"]], [x["expected"]])
    np.testing.assert_allclose(np.degrees([found.retardance_rad, found.offset_rad]), [100.0, 3.0], atol=1e-5)


def test_covariance_is_the_scatter():
    random = np.random.default_rng(16)
    true = scans(1.7, 0.1)
    found = [calibrate_plate(TWELVE_RAD, STATES, true + 0.01 * random.standard_normal(true.shape)) for _ in range(300)]
    values = np.array([[one.retardance_rad, one.offset_rad, one.gain] for one in found])
    sigmas = np.sqrt(np.mean([np.diag(one.covariance) for one in found], axis=0))
    np.testing.assert_allclose(sigmas, values.std(axis=0), rtol=0.15)
    np.testing.assert_allclose(values.mean(axis=0), [1.7, 0.1, 1.0], atol=0.002)
    np.testing.assert_allclose(np.mean([one.residual_sigma for one in found]), 0.01, rtol=0.03)


def test_wrong_handedness_turns_the_offset_by_90_degrees_and_nothing_shows():
    """The trap of the docstring: known S3 of the wrong sign fits as well, and later S3 come out with the wrong sign."""
    intensity = scans(1.7, 0.1)
    wrong = calibrate_plate(TWELVE_RAD, STATES * [1, 1, 1, -1], intensity)
    np.testing.assert_allclose([wrong.retardance_rad, wrong.offset_rad], [1.7, 0.1 - np.pi / 2], atol=1e-6)
    assert wrong.residual_sigma < 1e-9
    read = stokes_of_plate_scan(TWELVE_RAD, intensity[2], retardance_rad=wrong.retardance_rad, offset_rad=wrong.offset_rad)
    np.testing.assert_allclose(read.stokes, [1, 0.6, 0, -0.8], atol=1e-6)


@pytest.mark.parametrize(("states", "intensity", "word"), [
    (STATES[:2], scans(1.7, 0.1)[:2], "No state has S3"),
    ([[1, 0, 0, 1]], scans(1.7, 0.1, states=np.array([[1, 0, 0, 1]])), "No state has S1 or S2"),
    (STATES, scans(1.7, 0.1)[:2], "one row per state"),
    (STATES, np.full((3, 12), np.nan), "NaN"),
])  # fmt: skip
def test_states_that_cannot_tell_are_refused(states, intensity, word):
    with pytest.raises(ValueError, match=word):
        calibrate_plate(TWELVE_RAD, states, intensity)
