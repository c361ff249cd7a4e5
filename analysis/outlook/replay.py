"""Replay: a past window's displacement, added to today's state.

A two-port bench knows how far it is from the wanted state but not in which direction: its replay adds the change of angle.
A Stokes bench knows the direction: its replay turns today's state by the rotation that took the window's start to each later
state. One state's path fixes no more than the smallest such rotation, and that one is taken; it is formed from the start
directly, not by chaining steps, so that reading noise does not pile up.
"""

from dataclasses import dataclass

import numpy as np

from analysis.outlook.paths import Paths
from analysis.quantities import US_PER_S, BoolArray, FloatArray, IntArray, angle_between_rad

ANTIPODAL = 1e-12
"""Below this 1 + cos(angle) the rotation's axis is unknown; the worst of all axes is then taken."""


@dataclass(frozen=True, slots=True, eq=False)
class Replays:
    """How W windows would go from today's state; arrays of shape (W,).

    Attributes:
        worst_rad: Largest angle from the wanted state, rad, over judged samples; NaN where nothing was judged.
        beyond_s: Judged seconds beyond the limit.
        to_limit_s: From the window's start to the first judged sample beyond the limit, s; NaN: never.
        fails_after_s: From the start until the allowed seconds were used up, s; NaN: it held.
        followed_s: How long it was followed, s (its length, or up to a realignment).
    """

    worst_rad: FloatArray
    beyond_s: FloatArray
    to_limit_s: FloatArray
    fails_after_s: FloatArray
    followed_s: FloatArray

    @property
    def has_failed(self) -> BoolArray:
        """Windows that used up more than the allowed seconds."""
        return np.isfinite(self.fails_after_s)


def replay_angles(paths: Paths, angle_now_rad: float, limit_rad: float, *, allowed_s: float = 0.0) -> Replays:
    """Replay two-port windows from today's angle: γ(t) = γ now + (γ'(t) - γ'(start)).

    Args:
        paths: Windows of angles on the sphere, rad.
        angle_now_rad, limit_rad: Today's angle and the limit's, rad in [0, π].
        allowed_s: Seconds beyond the limit that a window may have, s.
    Returns:
        `Replays`. The sum is not clipped: below 0 it is inside, above π beyond. A window without a start never fails here;
        its trusted share is 0.
    Raises:
        ValueError: ``paths`` hold Stokes vectors, or an angle is outside its range.
    Source: docs/formulas.md, F-93.
    """
    _check(paths, 1, limit_rad, allowed_s)
    return _tell(paths, replayed_angles_rad(paths, angle_now_rad, None), limit_rad, allowed_s)


def replay_sops(paths: Paths, sop_now: FloatArray, wanted: FloatArray, limit_rad: float, *, allowed_s: float = 0.0) -> Replays:
    """Replay Stokes windows from today's state: s(t) = R(t) s now, R the smallest rotation from the window's start.

    Args:
        paths: Windows of Stokes vectors, any length above 0.
        sop_now, wanted: Today's and the wanted state, shape (3,).
        limit_rad, allowed_s: As of `replay_angles`.
    Returns:
        `Replays`. Where a window's state is opposite to its start, the axis is unknown and the worst one is taken. A window's
        ``excess_rad`` is added to the angle, whatever its direction was (own; errs to neither side on the whole).
    Raises:
        ValueError: ``paths`` hold angles, or a vector is null.
    Source: docs/formulas.md, F-92.
    """
    _check(paths, 3, limit_rad, allowed_s)
    return _tell(paths, replayed_angles_rad(paths, sop_now, wanted), limit_rad, allowed_s)


def replayed_angles_rad(paths: Paths, now: FloatArray | float, wanted: FloatArray | None) -> FloatArray:
    """Angle of every sample of every window as replayed from today's state, rad, shape (N,); NaN where nothing was read.

    Args:
        paths: Windows. now: Today's angle, rad; of Stokes windows today's state, shape (3,). wanted: None for angles.
    Source: docs/formulas.md, F-92, F-93.
    """
    if wanted is None:
        return paths.state + (float(np.asarray(now)) - np.repeat(paths.start, np.diff(paths.first)))
    now, wanted = _unit("sop_now", np.asarray(now)), _unit("wanted", wanted)
    length = np.sqrt(np.einsum("ij,ij->i", paths.state, paths.state))
    length[length == 0.0] = np.nan
    cosine = np.empty(len(length))
    for number, start in enumerate(paths.start / np.linalg.norm(paths.start, axis=1, keepdims=True)):
        part = slice(int(paths.first[number]), int(paths.first[number + 1]))
        cosine[part] = _replayed_cosine(paths.state[part], length[part], start, now, wanted)
    return _with_excess(paths, np.arccos(np.clip(cosine, -1.0, 1.0)))


def _with_excess(paths: Paths, angle_rad: FloatArray) -> FloatArray:
    return angle_rad if paths.excess_rad is None else angle_rad + paths.excess_rad


def _replayed_cosine(state: FloatArray, length: FloatArray, start: FloatArray, now: FloatArray, wanted: FloatArray) -> FloatArray:
    """w·R s with R = half-turn about the start, then half-turn about the middle of start and state (two half-turns a half angle
    apart are the rotation by the whole angle)."""
    flipped = 2.0 * (start @ now) * start - now
    along, reached, seen = (state @ np.stack([start, wanted, flipped], axis=1) / length[:, None]).T
    one_plus = 1.0 + along
    is_opposite = one_plus < ANTIPODAL
    middle = (wanted @ start + reached) * (flipped @ start + seen)
    cosine = middle / np.where(is_opposite, 1.0, one_plus) - wanted @ flipped
    return np.where(is_opposite, _worst_half_turn(start, now, wanted), cosine) if is_opposite.any() else cosine


def _worst_half_turn(start: FloatArray, now: FloatArray, wanted: FloatArray) -> float:
    """Smallest w·R s over all half-turns about axes square to ``start``."""
    along_now, along_wanted = start @ now, start @ wanted
    across = np.linalg.norm(now - along_now * start) * np.linalg.norm(wanted - along_wanted * start)
    return float(-along_now * along_wanted - across)


def _tell(paths: Paths, angle_rad: FloatArray, limit_rad: float, allowed_s: float) -> Replays:
    """Sum up replayed angles per window."""
    is_judged = (paths.held_s > 0.0) & ~np.isnan(angle_rad)
    index = np.flatnonzero(is_judged & (angle_rad > limit_rad))
    used_s = np.cumsum(paths.held_s[index])
    window = np.searchsorted(paths.first, index, side="right") - 1
    before = np.concatenate([[0.0], used_s])[np.searchsorted(index, paths.first[:-1])]
    used_s = used_s - before[window]
    since_s = (paths.at_us[index] - np.array([w.start_us for w in paths.windows], np.int64)[window]) / US_PER_S
    to_limit_s = _first(since_s, window, len(paths.windows))
    is_over = used_s > allowed_s
    over_s = np.maximum(since_s + allowed_s - (used_s - paths.held_s[index]), since_s)
    beyond_s = np.bincount(window, paths.held_s[index], len(paths.windows))
    return Replays(_maxima(np.where(is_judged, angle_rad, -np.inf), paths.first), beyond_s, to_limit_s,
                   _first(over_s[is_over], window[is_over], len(paths.windows)), paths.followed_s)


def _first(values: FloatArray, window: IntArray, count: int) -> FloatArray:
    """First value of each window, NaN where it has none; ``window`` rises."""
    found = np.full(count, np.nan)
    number, index = np.unique(window, return_index=True)
    found[number] = values[index]
    return found


def _maxima(values: FloatArray, first: IntArray) -> FloatArray:
    size = np.diff(first)
    largest = np.full(len(size), -np.inf)
    if len(values):
        largest[size > 0] = np.maximum.reduceat(values, first[:-1][size > 0])
    return np.where(np.isneginf(largest), np.nan, largest)


def _unit(name: str, vector: FloatArray) -> FloatArray:
    vector = np.asarray(vector, np.float64)
    length = np.linalg.norm(vector)
    if vector.shape != (3,) or not 0.0 < length < np.inf:
        raise ValueError(f"{name}={vector!r} is no state; pass three finite numbers, not all 0.")
    return vector / length


def _check(paths: Paths, components: int, limit_rad: float, allowed_s: float) -> None:
    if paths.state.ndim != (2 if components == 3 else 1):
        raise ValueError(f"state has shape {paths.state.shape}; use replay_sops for Stokes vectors, replay_angles for angles.")
    if not 0.0 < limit_rad <= np.pi or not allowed_s >= 0.0:
        raise ValueError(f"limit_rad={limit_rad!r} must lie in (0, pi] and allowed_s={allowed_s!r} s not below 0.")


def held_itself(paths: Paths, wanted: FloatArray | None, limit_rad: float, *, allowed_s: float = 0.0) -> Replays:
    """How the windows went by themselves, from their own states: what a back-test compares with.

    Args:
        paths, limit_rad, allowed_s: As of `replay_angles`. wanted: Shape (3,) for Stokes windows, None for angles.
    """
    _check(paths, 1 if wanted is None else 3, limit_rad, allowed_s)
    angle_rad = paths.state if wanted is None else _with_excess(paths, angle_between_rad(paths.state, _unit("wanted", wanted)))
    return _tell(paths, angle_rad, limit_rad, allowed_s)
