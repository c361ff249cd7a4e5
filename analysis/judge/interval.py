"""A tap's nominal interval between readings: declared, else the median of the recent ones, as a fold over data time."""

from dataclasses import dataclass
from itertools import pairwise
from statistics import median
from typing import Any, Final

import numpy as np

from analysis.quantities import US_PER_S, FloatArray, IntArray

RECENT: Final = 15


@dataclass(frozen=True, slots=True)
class IntervalState:
    """The newest sample and the last `RECENT` spacings, µs, oldest first; JSON-able."""

    last_us: int | None = None
    spacings_us: tuple[int, ...] = ()

    def as_json(self) -> list[Any]:
        return [self.last_us, list(self.spacings_us)]

    @classmethod
    def from_json(cls, values: list[Any] | None) -> "IntervalState":
        return cls(values[0], tuple(values[1])) if values else cls()

    @property
    def interval_s(self) -> float | None:
        """Median of the recent spacings, s; None before the second sample."""
        return median(self.spacings_us) / US_PER_S if self.spacings_us else None


def pass_samples(state: IntervalState, at_us: IntArray) -> IntervalState:
    """The state behind samples at ``at_us`` (sorted, shape (N,)); several at one instant count once."""
    if not len(at_us):
        return state
    if len(at_us) > 4 * RECENT:
        return IntervalState(int(at_us[-1]), tuple(_spacings(state, at_us)[-RECENT:].tolist()))
    times = at_us.tolist()
    added = [] if state.last_us is None else [times[0] - state.last_us]
    added += [later - earlier for earlier, later in pairwise(times)]
    return IntervalState(times[-1], (*state.spacings_us, *(spacing for spacing in added if spacing > 0))[-RECENT:])


def intervals_s(state: IntervalState, at_us: IntArray) -> FloatArray:
    """Nominal interval at each of the samples, s, shape (N,): the median of the last `RECENT` spacings up to it.

    NaN before the second sample ever. Cutting the samples anywhere gives the same.
    """
    if len(at_us) <= RECENT:
        return np.array(_few_intervals_s(state, at_us.tolist()))
    known = _spacings(state, at_us)
    ends = len(state.spacings_us) + np.cumsum(_is_new(state, at_us))
    if not len(known):
        return np.full(len(at_us), np.nan)
    padded = np.concatenate([np.full(RECENT - 1, np.nan), known.astype(np.float64)])
    medians = np.nanmedian(np.lib.stride_tricks.sliding_window_view(padded, RECENT), axis=1)
    return np.where(ends > 0, medians[np.maximum(ends, 1) - 1], np.nan) / US_PER_S


def _few_intervals_s(state: IntervalState, times_us: list[int]) -> list[float]:
    found = []
    for at_us in times_us:
        spacing = 0 if state.last_us is None else at_us - state.last_us
        state = IntervalState(at_us, (*state.spacings_us, spacing)[-RECENT:] if spacing > 0 else state.spacings_us)
        found.append(state.interval_s if state.spacings_us else float("nan"))
    return found


def _is_new(state: IntervalState, at_us: IntArray) -> IntArray:
    """1 where a sample adds a spacing, shape (N,)."""
    before = np.concatenate([[at_us[0] if state.last_us is None else state.last_us], at_us[:-1]])
    return (at_us > before).astype(np.int64)


def _spacings(state: IntervalState, at_us: IntArray) -> IntArray:
    """The state's spacings and those that the samples add, oldest first."""
    times = at_us if state.last_us is None else np.concatenate([[state.last_us], at_us])
    added = np.diff(times)
    return np.concatenate([np.array(state.spacings_us, dtype=np.int64), added[added > 0]])
