"""The sphere in a plane."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift.tangent import developed_steps, tangent_plane
from analysis.fibre.sphere import rotation, turned
from analysis.quantities import angle_between_rad
from tests.analysis.drift.walks import START, about_start, walk


def test_distances_from_the_direction_are_true():
    sop = walk(200, 5e-3, np.random.default_rng(1))
    position = tangent_plane(sop, START)
    np.testing.assert_allclose(np.linalg.norm(position, axis=1), angle_between_rad(sop, START), rtol=1e-12)
    np.testing.assert_allclose(tangent_plane(START[None], START), [[0.0, 0.0]])
    assert np.isnan(tangent_plane(-START[None], START)).all()


@given(st.integers(0, 10**6), st.lists(st.floats(-3.0, 3.0), min_size=3, max_size=3))
def test_steps_keep_their_lengths_and_turn_with_the_sphere(seed, turn):
    sop = walk(40, 1e-2, np.random.default_rng(seed))
    steps, moved = developed_steps(sop), developed_steps(turned(rotation(np.array(turn)), sop))
    np.testing.assert_allclose(np.linalg.norm(steps, axis=1), angle_between_rad(sop[1:], sop[:-1]), rtol=1e-9)
    np.testing.assert_allclose(moved @ moved.T, steps @ steps.T, rtol=0, atol=1e-10)  # equal but for one turn of the plane


def test_a_great_circle_becomes_a_straight_line_and_a_small_circle_an_arc():
    angle = np.linspace(0.0, 6.0, 61)
    great = developed_steps(np.stack([np.cos(angle), np.sin(angle), np.zeros(61)], axis=1))
    np.testing.assert_allclose(great, np.tile(great[0], (60, 1)), atol=1e-12)
    turn = np.linspace(0.0, 2.0 * np.pi, 4001)
    height = 0.6  # Gauss-Bonnet: along a parallel at height h the direction of travel turns by 2 π h in all
    small = developed_steps(np.stack([0.8 * np.cos(turn), 0.8 * np.sin(turn), np.full(4001, height)], axis=1))
    bearing = np.unwrap(np.arctan2(small[:, 1], small[:, 0]))
    np.testing.assert_allclose(abs(bearing[-1] - bearing[0]), 2.0 * np.pi * height, rtol=1e-3)


def test_gaps_stay_gaps():
    sop = about_start(0.01 * np.random.default_rng(2).standard_normal((10, 2)))
    sop[4] = np.nan
    steps = developed_steps(sop)
    assert np.flatnonzero(np.isnan(steps[:, 0])).tolist() == [3, 4]
    assert np.isnan(developed_steps(np.full((3, 3), np.nan))).all()
