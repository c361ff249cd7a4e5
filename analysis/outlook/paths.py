"""Past windows laid end to end, so that one pass over the samples replays them all."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from analysis.outlook.window import PastWindow
from analysis.quantities import US_PER_S, BoolArray, FloatArray, IntArray

HELD_INTERVALS = 3
"""A sample holds until the next, at most so many nominal intervals (CONTRACT 5)."""


@dataclass(frozen=True, slots=True, eq=False)
class Paths:
    """W windows of N samples in all.

    Attributes:
        windows: The windows themselves, in the order given.
        first: Index of each window's first sample, shape (W + 1,); the last is N.
        at_us: Times, shape (N,). state: Angles, rad, shape (N,), or Stokes vectors, shape (N, 3).
        held_s: Seconds for which each sample is judged, shape (N,): 0 where untrusted, NaN, outside the window or after the cut.
        start: State at each window's start, shape (W,) or (W, 3); NaN where nothing was judged.
        is_start_bound: Shape (W,): the first judged angle is only an upper bound; ``start`` is then 0.
        followed_s: How long each window was followed, s, shape (W,): its length, or up to its cut.
        excess_rad: What a replay adds to each sample's angle, rad, shape (N,); None: nothing.
        trusted_share: Judged seconds over ``followed_s``, shape (W,).
    """

    windows: tuple[PastWindow, ...]
    first: IntArray
    at_us: IntArray
    state: FloatArray
    held_s: FloatArray
    start: FloatArray
    is_start_bound: BoolArray
    followed_s: FloatArray
    trusted_share: FloatArray
    excess_rad: FloatArray | None = None

    def upto(self, count: int) -> "Paths":
        """The first ``count`` windows, without copying a sample."""
        last = int(self.first[count])
        return Paths(self.windows[:count], self.first[:count + 1], self.at_us[:last], self.state[:last], self.held_s[:last],
                     self.start[:count], self.is_start_bound[:count], self.followed_s[:count], self.trusted_share[:count],
                     None if self.excess_rad is None else self.excess_rad[:last])


def gather_paths(windows: Sequence[PastWindow], length_s: float | None = None) -> Paths:
    """Lay windows end to end.

    Args:
        windows: At least one, all two-port or all Stokes.
        length_s: Follow each for so long at most, s (the run's length); None: as long as it is.
    Raises:
        ValueError: No window, or two-port and Stokes windows together.
    Source: docs/formulas.md, F-21.
    """
    if not windows or len({np.ndim(window.state) for window in windows}) > 1:
        raise ValueError(f"{len(windows)} windows of mixed or no kind; pass at least one, all two-port or all Stokes.")
    first = np.concatenate([[0], np.cumsum([len(window.at_us) for window in windows])])
    at_us = np.concatenate([window.at_us for window in windows]).astype(np.int64, copy=False)
    state = np.concatenate([np.asarray(window.state, np.float64) for window in windows])
    end_us = np.array([_end_us(window, length_s) for window in windows], np.int64)
    start_us = np.array([window.start_us for window in windows], np.int64)
    is_finite = np.isfinite(state) if state.ndim == 1 else np.isfinite(state).all(axis=1)
    is_judged = np.concatenate([window.is_trusted for window in windows]) & is_finite
    held_s = np.where(is_judged, _held_s(at_us, first, start_us, end_us, windows), 0.0)
    followed_s = (end_us - start_us) / US_PER_S
    share = _sums(held_s, first) / np.where(followed_s > 0.0, followed_s, np.nan)
    start, is_bound = _starts(windows, first, state, held_s)
    return Paths(tuple(windows), first, at_us, state, held_s, start, is_bound, followed_s, np.nan_to_num(share),
                 _excess_rad(windows))


def _excess_rad(windows: Sequence[PastWindow]) -> FloatArray | None:
    if all(window.excess_rad is None for window in windows):
        return None
    return np.concatenate([np.zeros(len(window.at_us)) if window.excess_rad is None else window.excess_rad for window in windows])


def _end_us(window: PastWindow, length_s: float | None) -> int:
    end_us = window.end_us if length_s is None else min(window.end_us, window.start_us + round(length_s * US_PER_S))
    return max(window.start_us, end_us if window.cut_at_us is None else min(end_us, window.cut_at_us))


def _held_s(at_us: IntArray, first: IntArray, start_us: IntArray, end_us: IntArray, windows: Sequence[PastWindow]) -> FloatArray:
    """Seconds for which each sample stands, trusted or not."""
    size = np.diff(first)
    spacing_us = np.diff(at_us, append=at_us[-1:])
    at_last = first[1:][size > 0] - 1
    spacing_us[at_last] = np.iinfo(np.int64).max
    longest_us = np.array([round(HELD_INTERVALS * US_PER_S * _interval_s(window)) for window in windows], np.int64)
    until_us = at_us + np.minimum(spacing_us, np.repeat(longest_us, size))
    if any(window.held_s is not None for window in windows):
        until_us = np.concatenate([
            until_us[first[number]:first[number + 1]] if window.held_s is None
            else window.at_us + np.round(np.asarray(window.held_s) * US_PER_S).astype(np.int64)
            for number, window in enumerate(windows)])
    until_us = np.minimum(until_us, np.repeat(end_us, size))
    return np.where(at_us >= np.repeat(start_us, size), np.maximum(until_us - at_us, 0) / US_PER_S, 0.0)


def _interval_s(window: PastWindow) -> float:
    if window.interval_s is not None:
        return window.interval_s
    return float(np.median(np.diff(window.at_us))) / US_PER_S if len(window.at_us) > 1 else 1.0


def _starts(windows: Sequence[PastWindow], first: IntArray, state: FloatArray,
            held_s: FloatArray) -> tuple[FloatArray, BoolArray]:
    """State from which each window's displacement counts, and where it is 0 for want of more than a bound."""
    judged = np.append(np.flatnonzero(held_s > 0.0), len(state))
    begin = judged[np.searchsorted(judged, first[:-1])]
    found = begin < first[1:]
    start = np.full((len(windows), *state.shape[1:]), np.nan)
    start[found] = state[begin[found]]
    is_bound = np.zeros(len(windows), bool)
    for number, window in enumerate(windows):
        if window.start_state is not None:
            start[number] = window.start_state
        elif found[number] and state.ndim == 1 and _is_bound(window, int(begin[number] - first[number])):
            start[number], is_bound[number] = 0.0, True
    return start, is_bound


def _is_bound(window: PastWindow, index: int) -> bool:
    return window.is_upper_bound is not None and bool(window.is_upper_bound[index])


def _sums(values: FloatArray | BoolArray, first: IntArray) -> FloatArray:
    """Sum per window, shape (W,); 0 for a window without samples."""
    total = np.concatenate([[0.0], np.cumsum(values)])
    return total[first[1:]] - total[first[:-1]]
