"""Frozen channels: a fold over each channel's raw values, the same live and in replay.

A channel is flat from its 30th equal reading on, if it usually flickers by more than one of its steps (the step is the
smallest change ever seen). The weaker channel, if it was never seen to move, is flat from the 300th equal reading on when
the stronger one moves meanwhile (a bright port that never moves may well be steady light on a coarse converter). A calm
channel that toggles by one step is never flat. Rule: docs/formulas.md, F-14.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from analysis.quantities import BoolArray, FloatArray, IntArray

FLAT_AFTER: Final = 30
NEVER_MOVED_AFTER: Final = 300
FEWEST_MOVES: Final = 10
STEP_ROUNDING: Final = 1.5
PEER_READINGS_PER_MOVE: Final = 10


@dataclass(frozen=True, slots=True)
class FlatState:
    """Where the fold stands, for K taps of C channels, shape (K, C).

    Attributes:
        value: Last reading (NaN before the first); ``run``: equal readings up to it.
        step: Smallest change seen (inf before the first).
        pairs: Changes and repeats seen, each run counted up to `FLAT_AFTER`.
        moves: Changes seen; ``large_moves``: those of more than one step.
    """

    value: FloatArray
    run: IntArray
    step: FloatArray
    pairs: IntArray
    moves: IntArray
    large_moves: IntArray

    def as_json(self) -> list[list[list[float | None]]]:
        """Per tap and channel [value, run, step, pairs, moves, large moves]; null where not known."""
        columns = np.stack([self.value, self.run, self.step, self.pairs, self.moves, self.large_moves], axis=-1)
        return [[[x if np.isfinite(x) else None for x in channel] for channel in tap] for tap in columns.tolist()]


def start_flat(taps: int, channels: int) -> FlatState:
    """State before the first reading."""
    shape = (taps, channels)
    return FlatState(
        np.full(shape, np.nan),
        *(np.zeros(shape, np.int64), np.full(shape, np.inf)),
        *(np.zeros(shape, np.int64) for _ in range(3)),
    )


def flat_from_json(taps: Sequence[Any], channels: int) -> FlatState:
    """State of several taps from what `FlatState.as_json` gave for each; ``None`` or another number of channels starts anew."""
    state = start_flat(len(taps), channels)
    unknown = (np.nan, 0, np.inf, 0, 0, 0)
    parts = (state.value, state.run, state.step, state.pairs, state.moves, state.large_moves)
    for tap, saved in enumerate(taps):
        if saved is None or len(saved) != channels:
            continue
        for channel, values in enumerate(saved):
            for part, value, default in zip(parts, values, unknown, strict=True):
                part[tap, channel] = default if value is None else value
    return state


def mark_flat(values: FloatArray, first: IntArray, state: FlatState) -> tuple[BoolArray, FlatState]:
    """Mark frozen readings of K taps concatenated.

    Args:
        values: Raw channels, shape (N, C); for Stokes taps one channel that changes with any of S1, S2, S3.
        first: Index of each tap's first reading, shape (K,), rising; every tap has one reading at least.
        state: Of the K taps before these readings.
    Returns:
        Marks, shape (N, C), and the state behind the last readings. Cutting the readings anywhere gives the same.
    """
    count, channels = values.shape
    if not count:
        return np.zeros((0, channels), dtype=bool), state
    tap = np.repeat(np.arange(len(first)), np.diff(first, append=count))
    traced = [_trace(values[:, c], first, tap, state, c) for c in range(channels)]
    usually = [(2 * t.large_moves > t.pairs) & (t.moves >= FEWEST_MOVES) for t in traced]
    flat = np.stack([(t.run >= FLAT_AFTER) & u for t, u in zip(traced, usually, strict=True)], axis=-1)
    if channels > 1:
        for c, t in enumerate(traced):
            others = np.max([traced[o].moves for o in range(channels) if o != c], axis=0)
            is_weaker = t.value < np.max([traced[o].value for o in range(channels) if o != c], axis=0)
            flat[:, c] |= (t.moves == 0) & (t.run >= NEVER_MOVED_AFTER) & (others * PEER_READINGS_PER_MOVE >= t.run) & is_weaker
    last = np.append(first[1:], count) - 1
    names = ("value", "run", "step", "pairs", "moves", "large_moves")
    return flat, FlatState(*(np.stack([getattr(t, name)[last] for t in traced], axis=-1) for name in names))


@dataclass(frozen=True, slots=True)
class _Trace:
    """The state behind every reading of one channel, shape (N,)."""

    value: FloatArray
    run: IntArray
    step: FloatArray
    pairs: IntArray
    moves: IntArray
    large_moves: IntArray


def _trace(value: FloatArray, first: IntArray, tap: IntArray, state: FlatState, channel: int) -> _Trace:
    count = len(value)
    before = np.empty(count)
    before[1:] = value[:-1]
    before[first] = state.value[:, channel]
    change = np.abs(value - before)
    starts_tap = np.isnan(before)  # no reading before: neither a repeat nor a move
    is_move = (value != before) & ~starts_tap
    step = _running_minimum(np.where(is_move & (change > 0.0), change, np.inf), first, tap, state.step[:, channel])
    run = _run_lengths(is_move | starts_tap, first, tap, state.run[:, channel])
    run_before = np.empty(count, dtype=np.int64)
    run_before[1:] = run[:-1]
    run_before[first] = state.run[:, channel]
    ended = np.where(is_move, np.minimum(run_before, FLAT_AFTER), 0)
    large = is_move & (change > STEP_ROUNDING * step)
    return _Trace(
        value,
        run,
        step,
        _running_sum(ended, first, tap, state.pairs[:, channel]),
        _running_sum(is_move, first, tap, state.moves[:, channel]),
        _running_sum(large, first, tap, state.large_moves[:, channel]),
    )


def _running_sum(amount: IntArray | BoolArray, first: IntArray, tap: IntArray, at_start: IntArray) -> IntArray:
    total = np.cumsum(amount, dtype=np.int64)
    return total + (at_start - (total[first] - amount[first]))[tap]


def _running_minimum(amount: FloatArray, first: IntArray, tap: IntArray, at_start: FloatArray) -> FloatArray:
    """Smallest so far within each tap: only falls are rare, so they are walked one by one."""
    result = at_start[tap]
    below = np.flatnonzero(amount < result)
    ends = np.append(first[1:], len(amount))
    lowest = at_start.copy()
    for index in below.tolist():
        owner = tap[index]
        if amount[index] < lowest[owner]:
            lowest[owner] = amount[index]
            result[index : ends[owner]] = amount[index]
    return result


def _run_lengths(is_new: BoolArray, first: IntArray, tap: IntArray, at_start: IntArray) -> IntArray:
    """Length of the run of equal readings up to each reading."""
    index = np.arange(len(is_new))
    start = np.where(is_new, index, -1)
    start[first] = np.where(is_new[first], first, first - at_start)
    # A run begun in an earlier call starts before this tap's first index; shift taps apart so that one accumulate serves all.
    apart = tap * (len(is_new) + int(at_start.max(initial=0)) + 1)
    start = np.where((start >= 0) | (index == first[tap]), start + apart, np.iinfo(np.int64).min)
    return index + apart - np.maximum.accumulate(start) + 1
