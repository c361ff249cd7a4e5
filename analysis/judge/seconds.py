"""Reduced samples to what the folds judge: one entry per second, or one per plain sample."""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import IntEnum
from typing import Final

import numpy as np
from numpy.typing import NDArray

from analysis.judge.rule import LimitRule, Quantity
from analysis.quantities import US_PER_S, BoolArray, FloatArray, IntArray, db_from_ratio
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import Trust, is_usable

SECOND_US: Final = US_PER_S


class Status(IntEnum):
    """What one second says against a level."""

    UNTRUSTED = 0
    UNDECIDED = 1
    BELOW = 2
    INSIDE = 3


@dataclass(frozen=True, slots=True)
class Seconds:
    """M entries in time order, shape (M,) each, values in the quantity's unit ("bad" is low, for the angle high).

    Attributes:
        at_us: First sample of the second.
        worst: The worst value that is certain (an exact value, or a bound on the bad side); +inf (angle: -inf) where
            bounds leave it open, NaN where nothing was judged.
        best_sure: The best value that is certain not to be overstated: an exact value, or a bound on the good side;
            -inf (angle: +inf) where none.
        mean: ER of sums for ``er_db``, else the plain mean of the judged samples; NaN where undefined.
        is_judged: True where at least one sample is trusted or doubtful.
        is_doubtful: True where every judged sample is doubtful.
        count: Samples in the second.
        entry_s: Length of an entry, s: 1 for seconds, 0 for plain samples.
    """

    quantity: Quantity
    entry_s: float
    at_us: IntArray
    worst: FloatArray
    best_sure: FloatArray
    mean: FloatArray
    is_judged: BoolArray
    is_doubtful: BoolArray
    count: IntArray

    def __len__(self) -> int:
        return len(self.at_us)

    def take(self, index: slice | IntArray | BoolArray) -> "Seconds":
        return Seconds(self.quantity, self.entry_s, *(getattr(self, name)[index] for name in _ARRAYS))

    def shown(self) -> FloatArray:
        """The value to show of each second: the worst, or the bound where there is only a bound."""
        return np.where(np.isfinite(self.worst), self.worst, self.best_sure)


_ARRAYS = ("at_us", "worst", "best_sure", "mean", "is_judged", "is_doubtful", "count")


def concatenate(parts: Sequence[Seconds]) -> Seconds:
    """Spans one after the other."""
    return Seconds(
        parts[0].quantity, parts[0].entry_s, *(np.concatenate([getattr(part, name) for part in parts]) for name in _ARRAYS)
    )


def seconds_of(reduced: Reduced, quantity: Quantity) -> Seconds:
    """One entry per whole second that holds a sample (bins start at whole seconds of the time axis).

    ``reduced`` is of one tap, sorted by time. Give whole seconds: a second cut in two gives two entries.
    """
    at_us = reduced.at_us
    second = at_us // SECOND_US
    return _grouped(reduced, quantity, np.flatnonzero(np.diff(second, prepend=second[:1] - 1)), 1.0)


def seconds_of_many(reduced: Reduced, quantity: Quantity, first: IntArray) -> tuple[Seconds, IntArray]:
    """As `seconds_of` for several taps one after the other, each sorted by time.

    Args:
        first: Index of each tap's first sample, shape (K,), rising; every tap has one sample at least.
    Returns:
        The seconds of all taps, and the index of each tap's first second, shape (K,).
    """
    second = reduced.at_us // SECOND_US
    is_start = np.diff(second, prepend=second[:1] - 1) != 0
    is_start[first] = True
    starts = np.flatnonzero(is_start)
    return _grouped(reduced, quantity, starts, 1.0), np.searchsorted(starts, first)


def plain_samples_of(reduced: Reduced, quantity: Quantity) -> Seconds:
    """One entry per sample, for taps judged without aggregation."""
    return _grouped(reduced, quantity, np.arange(len(reduced)), 0.0)


def statuses(seconds: Seconds, level: float | FloatArray) -> NDArray[np.int8]:
    """`Status` of each second against a level (one, or one for each), shape (M,): below is `<` (angle: `>`).

    Below if any certain value is below; else inside if any judged one certainly is not; else undecided.
    """
    if seconds.quantity.is_bad_above:
        is_inside, is_below = seconds.best_sure <= level, seconds.worst > level
    else:
        is_inside, is_below = seconds.best_sure >= level, seconds.worst < level
    # Untrusted 0, undecided 1, below 2, inside 3: below goes before inside.
    judged = seconds.is_judged.astype(np.int8)
    return judged * (1 + is_below + 2 * (is_inside & ~is_below)).astype(np.int8)


def is_undecided(reduced: Reduced, rule: LimitRule) -> BoolArray:
    """True where a usable sample is a bound that does not meet the alarm level ("at floor, cannot tell"), shape (N,)."""
    one_each = plain_samples_of(reduced, rule.quantity)
    return statuses(one_each, rule.alarm) == Status.UNDECIDED


def _grouped(reduced: Reduced, quantity: Quantity, first: IntArray, entry_s: float) -> Seconds:
    sign = -1.0 if quantity.is_bad_above else 1.0
    value, trust = reduced.values(quantity), reduced.trust[quantity]
    usable = is_usable(trust, value)
    goodness = sign * value
    open_above, open_below = _open_sides(reduced, quantity)
    high = np.where(open_above, np.inf, goodness)
    low = np.where(open_below, -np.inf, goodness)
    if not len(first):
        empty = np.zeros(0)
        return Seconds(
            quantity,
            entry_s,
            np.zeros(0, np.int64),
            empty,
            empty,
            empty,
            np.zeros(0, bool),
            np.zeros(0, bool),
            np.zeros(0, np.int64),
        )
    judged = np.add.reduceat(usable.astype(np.int64), first)
    is_judged = judged > 0
    worst = np.where(is_judged, np.minimum.reduceat(np.where(usable, high, np.inf), first), np.nan)
    best = np.where(is_judged, np.maximum.reduceat(np.where(usable, low, -np.inf), first), np.nan)
    trusted = np.add.reduceat((usable & (trust == Trust.TRUSTED)).astype(np.int64), first)
    return Seconds(
        quantity,
        entry_s,
        reduced.at_us[first],
        sign * worst,
        sign * best,
        _means(reduced, quantity, value, usable, first, judged),
        is_judged,
        is_judged & (trusted == 0),
        np.diff(first, append=len(value)),
    )


def _open_sides(reduced: Reduced, quantity: Quantity) -> tuple[BoolArray, BoolArray]:
    """Where the true value may be better without end, and worse without end."""
    if quantity is Quantity.ER_DB:
        return reduced.is_lower_bound, reduced.is_upper_bound
    if quantity is Quantity.ANGLE_DEG:
        return reduced.angle_is_upper_bound, reduced.angle_is_lower_bound
    never = np.zeros(len(reduced), dtype=bool)
    return never, never


def _means(
    reduced: Reduced, quantity: Quantity, value: FloatArray, usable: BoolArray, first: IntArray, judged: IntArray
) -> FloatArray:
    if quantity is Quantity.ER_DB:
        wanted = np.add.reduceat(np.where(usable, reduced.wanted_power, 0.0), first)
        other = np.add.reduceat(np.where(usable, reduced.other_power, 0.0), first)
        both = (wanted > 0.0) & (other > 0.0)
        return db_from_ratio(np.where(both, wanted, np.nan) / np.where(both, other, np.nan))
    sums = np.add.reduceat(np.where(usable, value, 0.0), first)
    return np.where(judged > 0, sums / np.maximum(judged, 1), np.nan)
