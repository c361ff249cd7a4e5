"""Mean direction, concentration and spread, against published examples and scipy."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from analysis.drift.sphere import (
    direction_sums,
    fisher_angle_rad,
    fisher_concentration,
    mean_direction,
    spread,
    tangent_basis,
)
from analysis.fibre.sphere import rotation, turned
from tests.reference.values import close, reference, references


def from_degrees(pairs):
    longitude, latitude = np.radians(np.array(pairs, float)).T
    return np.stack([np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)], axis=1)


def cloud(seed, count=60, width=0.3):
    vectors = np.array([1.0, 0.0, 0.0]) + width * np.random.default_rng(seed).standard_normal((count, 3))
    return vectors / np.linalg.norm(vectors, axis=1, keepdims=True)


@pytest.mark.parametrize("row", references("T04-fisher-"), ids=lambda row: row["id"])
def test_fisher_examples(row):
    """R. A. Fisher, Proc. R. Soc. A 217, 295 (1953); numbers read in an open palaeomagnetism library's documentation."""
    found = mean_direction(direction_sums(from_degrees(row["inputs"]["lon_lat_deg"])))
    x, y, z = found.direction
    measured = [np.degrees(np.arctan2(y, x)), np.degrees(np.arctan2(z, np.hypot(x, y))), found.resultant, found.concentration,
                np.degrees(found.cone_rad)]
    np.testing.assert_allclose(measured, [row["expected"][key] for key in ("dec", "inc", "R", "k", "a95")], **close(row))


@pytest.mark.parametrize("row", references("T04-kappa-ml-"), ids=lambda row: row["id"])
def test_most_likely_concentration(row):
    np.testing.assert_allclose(fisher_concentration(row["inputs"]["R"] / row["inputs"]["n"]), row["expected"], **close(row))


@pytest.mark.parametrize("k", [1e-3, 0.5, 5.0, 400.0, 1e6])
def test_most_likely_concentration_undoes_the_mean_length(k):
    """coth k - 1/k, at both ends by their series."""
    length = k / 3.0 if k < 1e-2 else 1.0 / np.tanh(k) - 1.0 / k
    np.testing.assert_allclose(fisher_concentration(length), k, rtol=1e-6)


def test_concentration_agrees_with_scipy():
    """scipy.stats.vonmises_fisher.fit."""
    sop = cloud(3)
    mu, kappa = stats.vonmises_fisher.fit(sop)
    found = mean_direction(direction_sums(sop))
    np.testing.assert_allclose(found.direction, mu, rtol=0, atol=1e-9)
    np.testing.assert_allclose(found.concentration_ml, kappa, rtol=1e-6)


def test_intervals_hold_the_truth_as_often_as_they_say():
    """400 draws of 30 from scipy's von Mises-Fisher; binomial 3 sigma about 95 % is 3.3 %."""
    rng = np.random.default_rng(5)
    draws = stats.vonmises_fisher([0.0, 0.0, 1.0], 50.0).rvs(400 * 30, random_state=rng).reshape(400, 30, 3)
    found = [mean_direction(direction_sums(draw)) for draw in draws]
    inside = [one.concentration_low <= 50.0 <= one.concentration_high for one in found]
    covered = [np.arccos(one.direction[2]) <= one.cone_rad for one in found]
    free = [np.arccos(one.direction[2]) <= one.free_cone_rad for one in found]
    for share in (inside, covered, free):
        assert 0.91 <= np.mean(share) <= 0.985


@pytest.mark.parametrize("row", references("T04-fishq-"), ids=lambda row: row["id"])
def test_angle_that_holds_a_share(row):
    found = np.degrees([float(fisher_angle_rad(row["inputs"]["kappa"], share)) for share in (0.5, 0.63, 0.95)])
    np.testing.assert_allclose(found, row["expected"], **close(row))


def test_thirty_three_directions():
    row = reference("T04-sph33")
    found = mean_direction(direction_sums(np.array(row["inputs"]["xyz"])))
    assert found.count == 33
    np.testing.assert_allclose(found.resultant, row["expected"]["R"], **close(row))


@given(st.integers(0, 10**6), st.lists(st.floats(-3.0, 3.0), min_size=3, max_size=3))
def test_turning_the_sphere_turns_the_mean_and_nothing_else(seed, turn):
    sop = cloud(seed % 50)
    quaternion = rotation(np.array(turn))
    plain, moved = (direction_sums(each) for each in (sop, turned(quaternion, sop)))
    one, other = mean_direction(plain), mean_direction(moved)
    np.testing.assert_allclose(other.direction, turned(quaternion, one.direction), rtol=0, atol=1e-12)
    np.testing.assert_allclose([other.concentration, other.cone_rad, other.circular_error],
                               [one.concentration, one.cone_rad, one.circular_error], rtol=1e-8)
    np.testing.assert_allclose(spread(moved).eigenvalues, spread(plain).eigenvalues, rtol=0, atol=1e-12)
    np.testing.assert_allclose(spread(moved).tangent_rad2, spread(plain).tangent_rad2, rtol=0, atol=1e-12)


@given(st.integers(0, 59), st.integers(0, 59))
def test_sums_of_parts_are_the_sums_of_the_whole(cut, other_cut):
    sop = cloud(7)
    low, high = sorted((cut, other_cut))
    parts = [direction_sums(part) for part in (sop[:low], sop[low:high], sop[high:])]
    left, right, whole = (parts[0] + parts[1]) + parts[2], parts[2] + (parts[1] + parts[0]), direction_sums(sop)
    for one in (left, right):
        assert one.count == whole.count
        np.testing.assert_allclose(one.total, whole.total, rtol=0, atol=1e-12)
        np.testing.assert_allclose(one.outer, whole.outer, rtol=0, atol=1e-12)


def test_an_arc_shows_in_the_spread():
    angle = np.linspace(-0.5, 0.5, 101)
    found = spread(direction_sums(np.stack([np.cos(angle), np.sin(angle), np.zeros(101)], axis=1)))
    np.testing.assert_allclose(found.eigenvalues[0], 0.0, atol=1e-15)
    np.testing.assert_allclose(found.tangent_rad2, [0.0, np.mean(np.sin(angle) ** 2)], atol=1e-12)
    np.testing.assert_allclose(np.abs(found.tangent_axes[1]), [0.0, 1.0, 0.0], atol=1e-12)
    np.testing.assert_allclose(found.eigenvalues.sum(), 1.0)


def test_ends_and_faults():
    nothing = mean_direction(direction_sums(np.full((2, 3), np.nan)))
    assert nothing.count == 0 and np.isnan(nothing.concentration) and np.isnan(nothing.direction).all()
    assert np.isnan(spread(direction_sums(np.zeros((0, 3)))).eigenvalues).all()
    equal = mean_direction(direction_sums(np.tile([0.0, 0.0, 1.0], (5, 1))))
    assert equal.concentration == np.inf and equal.cone_rad == 0.0 and np.isnan(equal.free_cone_rad)
    opposite = mean_direction(direction_sums(np.array([[1.0, 0, 0], [-1.0, 0, 0], [0, 1e-3, 0]])))
    assert opposite.cone_rad == np.pi
    with pytest.raises(ValueError, match="shape"):
        direction_sums(np.zeros((4, 2)))
    with pytest.raises(ValueError, match="level"):
        mean_direction(direction_sums(cloud(1)), level=1.0)
    with pytest.raises(ValueError, match="mean_resultant"):
        fisher_concentration(1.1)
    with pytest.raises(ValueError, match="share"):
        fisher_angle_rad(1.0, 2.0)


def test_basis_is_right_handed():
    for direction in np.eye(3):
        first, second = tangent_basis(direction)
        np.testing.assert_allclose(np.cross(first, second), direction, atol=1e-15)
