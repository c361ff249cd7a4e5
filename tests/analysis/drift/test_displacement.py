"""Mean squared angular displacement."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift.brownian import mean_square_angle_rad2
from analysis.drift.displacement import CEILING_RAD2, displacement, measured_decorrelation_s, square_angle
from analysis.fibre.sphere import rotation, turned
from tests.analysis.drift.walks import about_start, noisy, walk
from tests.reference.values import close, reference


def test_five_states():
    row = reference("T04-msad-small")
    found = displacement(np.array(row["inputs"]["s"], float), 1.0, np.array([1, 2]))
    np.testing.assert_allclose(found.mean_square_rad2, row["expected"], **close(row))
    assert found.pairs.tolist() == [4, 3]


def test_ceiling_is_that_of_unrelated_states():
    row = reference("T04-uniform-sphere")
    np.testing.assert_allclose(CEILING_RAD2, row["expected"]["mean_sq_rad2"], **close(row))
    drawn = np.random.default_rng(1).standard_normal((100_000, 3))
    drawn /= np.linalg.norm(drawn, axis=1, keepdims=True)
    np.testing.assert_allclose(displacement(drawn, 1.0, np.array([1])).mean_square_rad2, CEILING_RAD2, rtol=0.02)


def test_steady_turn_goes_with_the_square_of_the_lag():
    angle = 1e-3 * np.arange(400)
    sop = np.stack([np.cos(angle), np.sin(angle), np.zeros(400)], axis=1)
    found = displacement(sop, 0.5, np.array([1, 3, 10, 100]))
    np.testing.assert_allclose(found.mean_square_rad2, (2e-3 * found.tau_s) ** 2, rtol=1e-9)
    np.testing.assert_allclose(square_angle(np.array([1e-20, 4.0])), [1e-20, np.pi**2])


def test_walk_and_noise():
    """4 D τ (finite D τ exactly) + 4 σ², and -½ ln mean cosine = D τ + a constant; 60 walks."""
    rng = np.random.default_rng(4)
    found = [displacement(noisy(walk(2000, 2e-5, rng), 0.01, rng), 1.0, np.array([1, 8, 64]), noise_rad=0.01) for _ in range(60)]
    net = np.mean([one.net_rad2 for one in found], axis=0)
    np.testing.assert_allclose(net, mean_square_angle_rad2(2e-5, np.array([1.0, 8.0, 64.0])), rtol=0.1, atol=4e-6)
    log_cosine = np.mean([one.log_cosine for one in found], axis=0)
    np.testing.assert_allclose(log_cosine[2] - log_cosine[1], 2e-5 * 56, rtol=0.1)
    assert found[0].noise_rad2 == pytest.approx(4e-4)


def test_decorrelation_is_measured_without_the_noise():
    """1/(2 D) = 50 s for a walk of D = 0.01 rad²/s, read with noise; a circling state never decorrelates."""
    rng = np.random.default_rng(5)
    found = displacement(noisy(walk(30_000, 0.01, rng), 0.05, rng), 1.0, np.arange(1, 200))
    np.testing.assert_allclose(measured_decorrelation_s(found), 50.0, rtol=0.15)
    turn = 0.1 * np.arange(2000)
    circle = about_start(0.3 * np.stack([np.cos(turn), np.sin(turn)], axis=1))
    assert np.isnan(measured_decorrelation_s(displacement(circle, 1.0)))
    assert np.isnan(measured_decorrelation_s(displacement(circle[:2], 1.0)))


@given(st.integers(0, 10**6), st.lists(st.floats(-3.0, 3.0), min_size=3, max_size=3))
def test_turning_the_sphere_changes_nothing(seed, turn):
    sop = walk(64, 1e-3, np.random.default_rng(seed))
    one, other = displacement(sop, 1.0), displacement(turned(rotation(np.array(turn)), sop), 1.0)
    np.testing.assert_allclose(other.mean_square_rad2, one.mean_square_rad2, rtol=1e-9)


def test_gaps_and_faults():
    sop = about_start(np.zeros((6, 2)))
    sop[2] = np.nan
    found = displacement(sop, 1.0, np.array([1, 4, 6]))
    assert found.pairs.tolist() == [3, 2, 0] and found.mean_square_rad2[:2].tolist() == [0.0, 0.0]
    assert np.isnan(found.mean_square_rad2[2]) and np.isnan(found.log_cosine[2])
    for bad, word in (((sop[:, :2], 1.0), "shape"), ((sop, 0.0), "interval_s"), ((sop, 1.0, np.array([0])), "factors")):
        with pytest.raises(ValueError, match=word):
            displacement(*bad)
