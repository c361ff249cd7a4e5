"""What motion and noise make of the degree of polarization."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from analysis.quantities import angle_between_rad, sop_from_angles
from analysis.reduce.dop import dop_of_average, dop_with_sigma
from tests.reference.values import close, reference
from tests.strategies import unit_sops


def test_average_of_two_states():
    """T02-avg-dop: azimuths 0 and 10 deg read as DOP 0.985."""
    row = reference("T02-avg-dop")
    found = dop_of_average(sop_from_angles(np.radians(row["inputs"]["psi_deg"]), 0.0))
    np.testing.assert_allclose(found, row["expected"], **close(row))


@given(unit_sops(), unit_sops())
def test_two_states_give_the_cosine_of_half_their_angle(one, other):
    np.testing.assert_allclose(dop_of_average([one, other]), np.cos(angle_between_rad(one, other) / 2), atol=1e-9)


def test_lost_states_are_left_out():
    assert dop_of_average([[1.0, 0, 0], [np.nan, 0, 0]]) == 1.0 and np.isnan(dop_of_average(np.full((2, 3), np.nan)))


def test_sigma_and_bias_against_draws():
    random = np.random.default_rng(21)
    stokes = np.array([1.0, 0.5, 0.4, 0.6])
    root = 0.02 * np.array([[1, 0, 0, 0], [0.5, 1, 0, 0], [0, 0.3, 1, 0], [0, 0, 0, 2.0]])
    dop, sigma, bias = dop_with_sigma(stokes, root @ root.T)
    drawn = stokes + random.standard_normal((400_000, 4)) @ root.T
    seen = np.linalg.norm(drawn[:, 1:], axis=1) / stokes[0]
    np.testing.assert_allclose(seen.mean() - dop, bias, rtol=0.05)
    np.testing.assert_allclose((np.linalg.norm(drawn[:, 1:], axis=1) / drawn[:, 0]).std(), sigma, rtol=0.02)


@given(unit_sops(), st.floats(0.1, 1.2), st.floats(1e-3, 1e3))
def test_dop_is_not_clipped_and_knows_no_unit(sop, dop, power):
    found, sigma, bias = dop_with_sigma(power * np.array([1.0, *(dop * sop)]), power**2 * 1e-4 * np.eye(4))
    np.testing.assert_allclose([found, sigma, bias], [dop, 0.01 * np.hypot(1, dop), 1e-4 / dop], rtol=1e-6)


def test_no_light_has_no_dop():
    assert np.isnan(dop_with_sigma(np.zeros(4), np.eye(4))[0])
