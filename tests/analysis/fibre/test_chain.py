"""Chains of elements: py_pol, Jones products, quaternions."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from analysis.fibre.chain import mueller_chain, retarder_chain, rotation_of_mueller
from analysis.fibre.jones import jones_retarder
from analysis.fibre.mueller import mueller_of_jones, mueller_polarizer, mueller_retarder
from analysis.fibre.sphere import turned

seeds = st.integers(0, 2**32 - 1)


def test_first_element_met_is_rightmost():
    """Light at 45° through a polarizer at 0° and then a quarter-wave plate at 45°: half the power, right-handed or left."""
    plate, polarizer = mueller_retarder(np.pi / 2, np.pi / 4), mueller_polarizer(0.0)
    out = mueller_chain([polarizer, plate]) @ [1.0, 0.0, 1.0, 0.0]
    np.testing.assert_allclose(out, plate @ (polarizer @ [1.0, 0.0, 1.0, 0.0]), atol=1e-15)
    assert out[0] == pytest.approx(0.5) and abs(out[3]) == pytest.approx(0.5)


def test_against_py_pol():
    """py_pol 1.3, a general-purpose polarization library: three retarders."""
    mueller = pytest.importorskip("py_pol.mueller").Mueller
    delta, theta = [0.3, 1.7, 2.4], [0.1, -0.6, 1.2]
    product = np.eye(4)
    for one, other in zip(delta, theta, strict=True):
        element = mueller()
        element.retarder_linear(R=one, azimuth=other)
        product = element.M[:, :, 0] @ product
    np.testing.assert_allclose(retarder_chain(delta, theta), product, atol=1e-9)


@settings(deadline=None)
@given(seeds)
def test_chain_is_the_jones_product(seed):
    delta, theta = np.random.default_rng(seed).uniform(-3, 3, (2, 4))
    jones = np.linalg.multi_dot([jones_retarder(delta[k], theta[k]) for k in (3, 2, 1, 0)])
    np.testing.assert_allclose(retarder_chain(delta, theta), mueller_of_jones(jones), atol=1e-9)


@settings(deadline=None)
@given(seeds)
def test_rotation_is_that_of_the_chain(seed):
    """Axis and angle against scipy's Rotation, and by turning a state."""
    rng = np.random.default_rng(seed)
    matrix = retarder_chain(*rng.uniform(-3, 3, (2, 5)))
    found = rotation_of_mueller(matrix)
    np.testing.assert_allclose(found.angle_rad, Rotation.from_matrix(matrix[1:, 1:]).magnitude(), atol=1e-7)
    state = rng.normal(size=3)
    np.testing.assert_allclose(turned(found.quaternion, state), matrix[1:, 1:] @ state, atol=1e-9)


@pytest.mark.parametrize("angle", [0.0, 1e-9, 1e-4, np.pi - 1e-9, np.pi])
def test_nothing_and_half_turns_keep_their_digits(angle):
    """A retarder turns the sphere by -δ about (cos 2θ, sin 2θ, 0); at π either direction is right."""
    found = rotation_of_mueller(mueller_retarder(angle, 0.3))
    assert float(found.angle_rad) == pytest.approx(angle, abs=1e-15, rel=1e-7)
    if angle > 0.0:
        axis = -np.array([np.cos(0.6), np.sin(0.6), 0.0])
        np.testing.assert_allclose(np.abs(found.axis @ axis), 1.0, atol=1e-7)


def test_many_chains_at_once():
    delta = np.linspace(0, 3, 11)[:, None] * [1.0, 0.5, 0.2]
    chains = retarder_chain(delta, [0.0, 0.4, -0.9])
    assert chains.shape == (11, 4, 4)
    np.testing.assert_allclose(chains[7], retarder_chain(delta[7], [0.0, 0.4, -0.9]), atol=1e-15)
    assert rotation_of_mueller(chains).axis.shape == (11, 3)


def test_what_is_no_rotation_is_refused():
    with pytest.raises(ValueError, match="leave polarizers out"):
        rotation_of_mueller(mueller_polarizer(0.2))
    with pytest.raises(ValueError, match="at least one"):
        mueller_chain([])
