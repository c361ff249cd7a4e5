"""Mueller matrices against handbook values (D. Goldstein, Polarized Light, 2nd ed. 2003, from memory), Jones, py_pol."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.fibre.jones import jones_retarder, jones_rotator
from analysis.fibre.mueller import mueller_of_jones, mueller_polarizer, mueller_retarder, mueller_rotator
from analysis.fibre.sphere import rotation, turned

angles_rad = st.floats(-7.0, 7.0)


def test_retarder_on_a_state():
    """δ = 60° at 20° on (1, 0.6, 0.48, 0.64), computed with mpmath from the handbook matrix."""
    out = mueller_retarder(np.radians(60), np.radians(20)) @ [1.0, 0.6, 0.48, 0.64]
    np.testing.assert_allclose(out, [1.0, 0.237955101507, 0.91146830846, 0.335563544415], atol=1e-10)


def test_quarter_wave_plate_makes_left_hand_light():
    """Fast axis x, light linear at +45° → S3 = -1 (optics naming, phase exp(+i(wt - kz)))."""
    np.testing.assert_allclose(mueller_retarder(np.pi / 2, 0.0) @ [1, 0, 1, 0], [1, 0, 0, -1], atol=1e-12)


def test_polarizer_at_30_degrees():
    expected = [[0.5, 0.25, 0.4330127018922, 0.0], [0.25, 0.125, 0.2165063509461, 0.0],
                [0.4330127018922, 0.2165063509461, 0.375, 0.0], [0.0, 0.0, 0.0, 0.0]]
    np.testing.assert_allclose(mueller_polarizer(np.radians(30)), expected, atol=1e-12)


def test_rotator_turns_the_azimuth_forward():
    out = mueller_rotator(np.radians(25)) @ [1, 1, 0, 0]
    np.testing.assert_allclose(out, [1.0, 0.6427876096865394, 0.766044443118978, 0.0], atol=1e-12)


@given(angles_rad, angles_rad)
def test_closed_forms_agree_with_jones(retardance, azimuth):
    np.testing.assert_allclose(mueller_retarder(retardance, azimuth),
                               mueller_of_jones(jones_retarder(retardance, azimuth)), atol=1e-9)
    np.testing.assert_allclose(mueller_rotator(azimuth), mueller_of_jones(jones_rotator(azimuth)), atol=1e-9)


@given(angles_rad, angles_rad)
def test_a_retarder_turns_the_sphere_by_minus_its_retardance(retardance, azimuth):
    axis = np.array([np.cos(2 * azimuth), np.sin(2 * azimuth), 0.0])
    state = np.array([0.6, 0.48, 0.64])
    np.testing.assert_allclose((mueller_retarder(retardance, azimuth) @ [1.0, *state])[1:],
                               turned(rotation(-retardance * axis), state), atol=1e-9)


@pytest.mark.parametrize(("retardance", "azimuth"), [(0.3, 0.0), (1.0, 0.3), (np.pi / 2, -0.7), (2.9, 1.4)])
def test_against_py_pol(retardance, azimuth):
    """py_pol 1.3, a general-purpose polarization library with the same convention."""
    mueller = pytest.importorskip("py_pol.mueller").Mueller()
    mueller.retarder_linear(R=retardance, azimuth=azimuth)
    np.testing.assert_allclose(mueller_retarder(retardance, azimuth), mueller.M[:, :, 0], atol=1e-9)
    mueller.diattenuator_perfect(azimuth=azimuth)
    np.testing.assert_allclose(mueller_polarizer(azimuth), mueller.M[:, :, 0], atol=1e-9)
