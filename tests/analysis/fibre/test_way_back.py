"""The smallest rotation between two states: quaternions, both ends, arrays."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.fibre.sphere import turned
from analysis.fibre.way_back import smallest_rotation
from analysis.quantities import angle_between_rad

seeds = st.integers(0, 2**32 - 1)


def pair(seed):
    states = np.random.default_rng(seed).normal(size=(2, 3))
    return states / np.linalg.norm(states, axis=1, keepdims=True)


def test_quarter_turn_by_hand():
    """From S1 to S2: 90° about S3, right-handed."""
    back = smallest_rotation([1.0, 0.0, 0.0], [0.0, 2.0, 0.0])
    np.testing.assert_allclose(back.axis, [0, 0, 1], atol=1e-15)
    assert back.angle_rad == pytest.approx(np.pi / 2)


@settings(deadline=None)
@given(seeds)
def test_it_brings_the_state_back_by_the_least_angle(seed):
    now, wanted = pair(seed)
    back = smallest_rotation(now, wanted)
    np.testing.assert_allclose(turned(back.quaternion, now), wanted, atol=1e-12)
    assert back.angle_rad == pytest.approx(float(angle_between_rad(now, wanted)), abs=1e-15)
    assert abs(back.axis @ now) < 1e-9 and abs(back.axis @ wanted) < 1e-9


@settings(deadline=None)
@given(seeds, st.sampled_from([1e-3, 1e-6, 1e-9, 1e-12]))
def test_near_and_opposite_states_keep_their_axis(seed, angle):
    """Known axis e, known small angle: axis within 1e-3 down to 1e-12 rad (double spacing allows 1e-16/1e-12)."""
    now, aside = pair(seed)
    axis = np.cross(now, aside)
    axis /= np.linalg.norm(axis)
    wanted = now * np.cos(angle) + np.cross(axis, now) * np.sin(angle)
    near, far = smallest_rotation(now, wanted), smallest_rotation(now, -wanted)
    np.testing.assert_allclose(near.axis, axis, atol=1e-3 if angle < 1e-11 else 1e-5)
    np.testing.assert_allclose(far.axis, -axis, atol=1e-3 if angle < 1e-11 else 1e-5)
    assert near.angle_rad == pytest.approx(angle, rel=1e-3) and far.angle_rad == pytest.approx(np.pi - angle, rel=1e-12)


@settings(deadline=None)
@given(seeds)
def test_equal_and_opposite_states_have_some_axis(seed):
    now = pair(seed)[0]
    for wanted, angle in ((now, 0.0), (-now, np.pi)):
        back = smallest_rotation(now, wanted)
        assert back.angle_rad == pytest.approx(angle, abs=1e-15) and np.linalg.norm(back.axis) == pytest.approx(1.0)
        np.testing.assert_allclose(turned(back.quaternion, now), wanted, atol=1e-12)


def test_arrays_and_null_vectors():
    back = smallest_rotation(np.array([[1.0, 0, 0], [0, 0, 0], [0, 0, 1.0]]), [0.0, 0.0, 1.0])
    assert back.axis.shape == (3, 3) and back.vector_rad.shape == (3, 3)
    assert np.isnan(back.angle_rad[1]) and np.isnan(back.axis[1]).all() and back.angle_rad[2] == 0.0
    with pytest.raises(ValueError, match="S1, S2, S3"):
        smallest_rotation([1.0, 0.0], [0.0, 0.0, 1.0])
