"""Mueller matrices against handbook values (D. Goldstein, Polarized Light, 2nd ed. 2003, from memory), Jones, py_pol."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.fibre.jones import jones_retarder, jones_rotator
from analysis.fibre.mueller import (
    is_physical,
    mueller_coherency,
    mueller_depolarizer,
    mueller_of_jones,
    mueller_polarizer,
    mueller_retarder,
    mueller_rotator,
)
from analysis.fibre.sphere import rotation, turned
from tests.reference.values import close, reference, references

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


@pytest.mark.parametrize("row", references("T02-mueller-ret-apply") + references("T02-qwp"), ids=lambda row: row["id"])
def test_retarders_on_states(row):
    """Handbook matrices (Collett, Goldstein; from memory, checked with mpmath and Jones)."""
    x = row["inputs"]
    out = mueller_retarder(*np.radians([x.get("delta_deg", 90), x.get("theta_deg", 0)])) @ x["S_in"]
    np.testing.assert_allclose(out, row["expected"], **close(row))


def test_polarizer_and_rotator_of_the_reference_file():
    pol, rot = reference("T02-mueller-pol"), reference("T02-rotator")
    np.testing.assert_allclose(mueller_polarizer(np.radians(pol["inputs"]["theta_deg"])), pol["expected"], **close(pol))
    turned_state = mueller_rotator(np.radians(rot["inputs"]["alpha_deg"])) @ rot["inputs"]["S_in"]
    np.testing.assert_allclose(turned_state, rot["expected"], **close(rot))


@given(angles_rad, angles_rad)
def test_many_jones_matrices_at_once(retardance, azimuth):
    both = np.stack([jones_retarder(retardance, azimuth), jones_rotator(azimuth)])
    np.testing.assert_allclose(mueller_of_jones(both), [mueller_of_jones(one) for one in both], atol=1e-12)


def test_jones_to_mueller_against_py_pol():
    """py_pol's own conversion of a random Jones matrix."""
    jones = pytest.importorskip("py_pol.jones_matrix").Jones_matrix()
    mueller = pytest.importorskip("py_pol.mueller").Mueller()
    random = np.random.default_rng(12)
    matrix = 0.4 * (random.standard_normal((2, 2)) + 1j * random.standard_normal((2, 2)))
    jones.from_matrix(matrix)
    mueller.from_Jones(jones)
    np.testing.assert_allclose(mueller_of_jones(matrix), mueller.M[:, :, 0], atol=1e-9)


@given(angles_rad, angles_rad, st.floats(0.0, 1.0))
def test_real_elements_are_physical(retardance, azimuth, share):
    element = mueller_depolarizer(share) @ mueller_retarder(retardance, azimuth) @ mueller_polarizer(azimuth / 2)
    assert is_physical(element) and is_physical(mueller_of_jones(jones_retarder(retardance, azimuth)))


def test_an_element_with_a_jones_matrix_has_one_eigenvalue():
    """S. R. Cloude, Optik 75, 26 (1986), from memory: rank one means no depolarization."""
    pure = np.linalg.eigvalsh(mueller_coherency(mueller_retarder(1.0, 0.3)))
    np.testing.assert_allclose(pure, [0, 0, 0, 1], atol=1e-12)
    np.testing.assert_allclose(np.linalg.eigvalsh(mueller_coherency(mueller_depolarizer(0.0))), [0.25] * 4, atol=1e-12)


def test_impossible_elements_are_told():
    mirror = np.diag([1.0, 1.0, 1.0, -1.0])  # turns the sphere inside out: no element does
    several = np.stack([mirror, 1.1 * np.eye(4), np.full((4, 4), np.nan), np.eye(4)])
    assert is_physical(several).tolist() == [False, False, False, True]
