"""Replays against counts on paper, a plain loop, and rotations by quaternions."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.fibre.sphere import rotation, turned
from analysis.outlook.paths import gather_paths
from analysis.outlook.replay import held_itself, replay_angles, replay_sops
from analysis.quantities import angle_between_rad
from tests.analysis.outlook.nights import bumped, calm, minutes_us, night

LIMIT_RAD = np.radians(10.0)
WANTED = np.array([0.6, 0.48, 0.64])
seeds = st.integers(0, 2**32 - 1)


def unit(vectors: np.ndarray) -> np.ndarray:
    return vectors / np.linalg.norm(vectors, axis=-1, keepdims=True)


def wandering(day: int, seed: int, step: float = 0.02):
    """A Stokes night that wanders."""
    steps = np.random.default_rng(seed).normal(0, step, (720, 3))
    return night(day, unit(np.array([1.0, 0.2, -0.3]) + np.cumsum(steps, axis=0)))


def test_displacement_is_added_to_today():
    """A night that rose by 4.5° for 7 minutes from minute 30 on: from 5° it stays (9.5°), from 6° it crosses (10.5°)."""
    paths = gather_paths([bumped(0, 4.5, 30, 7), calm(1)])
    held, failed = (replay_angles(paths, np.radians(now), LIMIT_RAD) for now in (5.0, 6.0))
    np.testing.assert_allclose(np.degrees(held.worst_rad), [9.5, 5.0])
    assert not held.has_failed.any() and np.isnan(held.to_limit_s).all()
    np.testing.assert_array_equal(failed.has_failed, [True, False])
    assert (failed.to_limit_s[0], failed.fails_after_s[0], failed.beyond_s[0]) == (1800.0, 1800.0, 420.0)


def test_exactly_at_the_limit_is_inside():
    """CONTRACT 5: below is <."""
    paths = gather_paths([calm(0)])
    assert not replay_angles(paths, LIMIT_RAD, LIMIT_RAD).has_failed[0]
    assert replay_angles(paths, np.nextafter(LIMIT_RAD, 1.0), LIMIT_RAD).has_failed[0]


@pytest.mark.parametrize(("allowed_s", "fails_after_s"), [(0.0, 600.0), (59.0, 659.0), (60.0, 1200.0), (200.0, 1340.0),
                                                          (240.0, np.nan)])
def test_allowed_seconds_are_used_up(allowed_s, fails_after_s):
    """Beyond for one minute at minute 10 and three from minute 20 on: 240 s in all."""
    state = np.full(720, 0.01)
    state[[10, 20, 21, 22]] = 0.5
    replays = replay_angles(gather_paths([calm(0), night(1, state)]), 0.01, LIMIT_RAD, allowed_s=allowed_s)
    np.testing.assert_array_equal(replays.beyond_s, [0.0, 240.0])
    np.testing.assert_array_equal(replays.to_limit_s, [np.nan, 600.0])
    np.testing.assert_allclose(replays.fails_after_s, [np.nan, fails_after_s])


def test_untrusted_excursions_and_those_after_a_cut_do_not_count():
    trusted = np.ones(720, bool)
    trusted[30:37] = False
    paths = gather_paths([bumped(0, 9.0, 30, 7, is_trusted=trusted), bumped(1, 9.0, 30, 7, cut_at_us=int(minutes_us(1)[30]))])
    assert not replay_angles(paths, np.radians(3.0), LIMIT_RAD).has_failed.any()


def test_a_window_without_a_start_tells_nothing():
    paths = gather_paths([night(0, np.zeros(0)), calm(1, is_trusted=np.zeros(720, bool))])
    replays = replay_angles(paths, 0.01, LIMIT_RAD)
    assert np.isnan(replays.worst_rad).all() and not replays.has_failed.any()


@settings(deadline=None)
@given(seeds)
def test_rotation_is_the_smallest_one(seed):
    """Against quaternions about start × state, formed in analysis.fibre.sphere."""
    window = wandering(0, seed)
    now = unit(np.random.default_rng(seed + 1).normal(size=3))
    axis = np.cross(window.state[0], window.state)
    size = np.linalg.norm(axis, axis=1, keepdims=True)
    angle = angle_between_rad(window.state[0], window.state)[:, None]
    vector = np.divide(axis * angle, size, out=np.zeros_like(axis), where=size > 0)
    expected = angle_between_rad(turned(rotation(vector), now), WANTED)
    replays = replay_sops(gather_paths([window]), now, WANTED, LIMIT_RAD)
    assert replays.worst_rad[0] == pytest.approx(expected.max(), abs=1e-7)
    assert replays.beyond_s[0] == 60.0 * np.count_nonzero(expected > LIMIT_RAD)


@settings(deadline=None)
@given(seeds, st.floats(-3, 3), st.floats(-3, 3))
def test_turning_the_sphere_changes_nothing(seed, a, b):
    """States, today's and the wanted one turned together."""
    turn = rotation(np.array([a, b, 0.7]))
    window = wandering(0, seed)
    now = unit(WANTED + [0.02, 0.05, -0.03])
    plain = replay_sops(gather_paths([window]), now, WANTED, LIMIT_RAD)
    other = replay_sops(gather_paths([night(0, turned(turn, window.state))]), turned(turn, now), turned(turn, WANTED), LIMIT_RAD)
    np.testing.assert_allclose(other.worst_rad, plain.worst_rad, atol=1e-7)


def test_today_at_a_nights_own_start_gives_that_night():
    """Both ways: a replay from the window's own start is the window itself."""
    window = wandering(0, 3)
    own = held_itself(gather_paths([window]), WANTED, LIMIT_RAD)
    again = replay_sops(gather_paths([window]), window.state[0], WANTED, LIMIT_RAD)
    np.testing.assert_allclose(again.worst_rad, own.worst_rad, atol=1e-7)
    np.testing.assert_array_equal(again.to_limit_s, own.to_limit_s)
    plain = gather_paths([bumped(0, 9.0, 5, 3)])
    assert replay_angles(plain, plain.start[0], LIMIT_RAD).beyond_s[0] == held_itself(plain, None, LIMIT_RAD).beyond_s[0] == 180.0


def test_an_opposite_state_takes_the_worst_axis():
    """From (1,0,0) to (-1,0,0): today (0,1,0) may go anywhere on its great circle, at worst opposite to the wanted state."""
    state = np.array([[1.0, 0.0, 0.0], [-1.0, 0.0, 0.0]])
    paths = gather_paths([night(0, state, at_us=minutes_us(0)[:2], length_s=120.0)])
    aside = replay_sops(paths, np.array([0.0, 1.0, 0.0]), np.array([0.0, 0.0, 1.0]), LIMIT_RAD)
    assert aside.worst_rad[0] == pytest.approx(np.pi)
    same = replay_sops(paths, np.array([1.0, 0.0, 0.0]), np.array([1.0, 0.0, 0.0]), LIMIT_RAD)
    assert same.worst_rad[0] == pytest.approx(np.pi)


def test_many_windows_are_each_alone():
    windows = [bumped(day, by, first, 9) for day, (by, first) in enumerate([(2, 0), (9, 700), (8, 3), (7.1, 300), (1, 1)])]
    together = replay_angles(gather_paths(windows), np.radians(4.0), LIMIT_RAD, allowed_s=120.0)
    for number, window in enumerate(windows):
        alone = replay_angles(gather_paths([window]), np.radians(4.0), LIMIT_RAD, allowed_s=120.0)
        for name in ("worst_rad", "beyond_s", "to_limit_s", "fails_after_s", "followed_s"):
            np.testing.assert_array_equal(getattr(together, name)[number], getattr(alone, name)[0])


def test_wrong_kinds_and_limits_are_refused():
    angles, sops = gather_paths([calm(0)]), gather_paths([wandering(0, 1)])
    with pytest.raises(ValueError, match="replay_sops"):
        replay_angles(sops, 0.1, LIMIT_RAD)
    with pytest.raises(ValueError, match="replay_angles"):
        replay_sops(angles, WANTED, WANTED, LIMIT_RAD)
    with pytest.raises(ValueError, match="limit_rad"):
        replay_angles(angles, 0.1, 0.0)
    with pytest.raises(ValueError, match="sop_now"):
        replay_sops(sops, np.zeros(3), WANTED, LIMIT_RAD)


def test_an_excess_is_added_wherever_today_is():
    """A minute whose worst second stood 0.03 rad further out: by itself and replayed."""
    sop = np.tile([np.cos(0.1), np.sin(0.1), 0.0], (720, 1))
    excess = np.zeros(720)
    excess[100] = 0.03
    paths = gather_paths([night(0, sop, excess_rad=excess)])
    wanted = np.array([1.0, 0.0, 0.0])
    np.testing.assert_allclose(held_itself(paths, wanted, 0.2).worst_rad, [0.13], atol=1e-9)
    aside = replay_sops(paths, np.array([0.0, 1.0, 0.0]), wanted, 0.2)
    np.testing.assert_allclose(aside.worst_rad, [np.pi / 2 + 0.03], atol=1e-9)
