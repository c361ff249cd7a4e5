"""Rotations and angles on the sphere."""

import numpy as np
import pytest

from analysis.fibre.sphere import after, angle_between_rad, chained, rotation, sop_of_angles, turned


@pytest.mark.parametrize(("other", "expected_rad"), [
    ([0.9999999999995, 9.999999999998333e-07, 0.0], 1e-6), ([0.9999995000000417, 0.0009999998333333417, 0.0], 1e-3),
    ([-1.0, 1e-08, 0.0], 3.141592643589793),
])
def test_small_and_flat_angles_are_exact(other, expected_rad):
    """Values computed with mpmath for the stable form atan2(|a×b|, a·b)."""
    assert angle_between_rad(np.array([1.0, 0.0, 0.0]), np.array(other)) == pytest.approx(expected_rad, rel=1e-9)


def test_separation_of_two_states():
    """(20°, 10°) and (32°, -4°) lie 36.6307352281° apart, computed with mpmath."""
    one, other = sop_of_angles(np.radians([20, 32]), np.radians([10, -4]))
    assert np.degrees(angle_between_rad(one, other)) == pytest.approx(36.6307352281, rel=1e-9)


def test_rotation_is_right_handed():
    np.testing.assert_allclose(turned(rotation([0, 0, np.pi / 2]), np.array([1.0, 0, 0])), [0, 1, 0], atol=1e-12)


def test_running_product_is_that_of_a_plain_loop():
    steps = rotation(np.random.default_rng(5).normal(0, 0.5, (37, 3)))
    expected = [steps[0]]
    for step in steps[1:]:
        expected.append(after(step, expected[-1]))
    np.testing.assert_allclose(chained(steps), expected, atol=1e-12)


def test_a_rotation_keeps_angles():
    rng = np.random.default_rng(6)
    one, other = rng.normal(size=(2, 40, 3))
    turns = rotation(rng.normal(size=(40, 3)))
    np.testing.assert_allclose(angle_between_rad(turned(turns, one), turned(turns, other)),
                               angle_between_rad(one, other), atol=1e-9)
