"""One tap's seconds of a run: each in one class, as a fold over stretches of any length. Rule: docs/formulas.md, F-160.

Below a limit if any judged sample of the second is below; else good if a judged one covers it; else untrusted; else no
reading. A sample without a following one within three intervals covers its own interval and no more: a gap is never good.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field
from enum import IntEnum, IntFlag
from typing import Final

import numpy as np
from numpy.typing import NDArray

from analysis.judge.interval import IntervalState, intervals_s, pass_samples
from analysis.judge.rule import Quantity
from analysis.judge.seconds import Seconds, Status, concatenate, plain_samples_of, seconds_of, statuses
from analysis.quantities import US_PER_S, BoolArray, FloatArray, IntArray
from analysis.reduce import sample
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import DOUBTFUL_REASONS, NONE_REASONS, QUANTITIES, UNTRUSTED_REASONS, Reason, is_usable

ClassArray = NDArray[np.uint8]
WhyArray = NDArray[np.uint32]

HOLD_INTERVALS: Final = 3.0
UNKNOWN_INTERVAL_S: Final = 1.0
_NO_REASON: Final = np.uint32(0)


class LedgerClass(IntEnum):
    """What a second of a run is; of several taps (or limits) the highest stands."""

    GOOD = 0
    UNTRUSTED = 1
    NO_READING = 2
    BELOW = 3

    @property
    def words(self) -> str:
        """As the API and every page name it."""
        return _WORDS[self]


_WORDS: Final = {
    LedgerClass.GOOD: "good",
    LedgerClass.UNTRUSTED: "untrusted",
    LedgerClass.NO_READING: "no reading",
    LedgerClass.BELOW: "below limit",
}


class LedgerReason(IntFlag):
    """Why, beyond the samples' own reasons (`Reason`, the low 24 bits)."""

    NO_LIMIT = 1 << 24
    DECLARED = 1 << 25
    NOT_KEPT = 1 << 26
    UNREADABLE = 1 << 27
    ER = 1 << 28
    ANGLE = 1 << 29
    DOP = 1 << 30
    POWER = 1 << 31

    @property
    def words(self) -> str:
        """A short phrase for a person."""
        return _REASON_WORDS[self]


_REASON_WORDS: Final = {
    LedgerReason.NO_LIMIT: "No limit in force",
    LedgerReason.DECLARED: "Declared unusable",
    LedgerReason.NOT_KEPT: "Raw readings no longer kept",
    LedgerReason.UNREADABLE: "Raw readings cannot be read",
    LedgerReason.ER: "Extinction ratio below its limit",
    LedgerReason.ANGLE: "Angle beyond its limit",
    LedgerReason.DOP: "Degree of polarization below its limit",
    LedgerReason.POWER: "Power below its limit",
}
_BELOW_BY: Final = {
    Quantity.ER_DB: LedgerReason.ER,
    Quantity.ANGLE_DEG: LedgerReason.ANGLE,
    Quantity.DOP: LedgerReason.DOP,
    Quantity.POWER_W: LedgerReason.POWER,
}


@dataclass(frozen=True, slots=True)
class Ruling:
    """An alarm level, in the quantity's unit, and the half-open span, µs, in which it is in force; whole seconds."""

    quantity: Quantity
    alarm: float
    from_us: int
    until_us: int


@dataclass(frozen=True, slots=True)
class TapFold:
    """What a tap's later seconds need of earlier samples: the last one, and the spacings before it."""

    last: Reduced | None = None
    interval: IntervalState = field(default_factory=IntervalState)


@dataclass(frozen=True, slots=True)
class TapSeconds:
    """M seconds of one tap, shape (M,) each.

    Attributes:
        klass: `LedgerClass`. is_doubtful: Good, but some of it only doubtfully so.
        why: Bits of `Reason` and `LedgerReason`; 0 for a good second without doubt.
        er_db: ER of sums of the second's own judged samples, dB, or their bound; NaN where there is none.
        least_er_db: Their worst; ``is_bound``: no sample of the second is more than a bound.
        wanted_power, other_power: Sums over the stretch of its judged samples; ``samples``: how many those are.
    """

    klass: ClassArray
    is_doubtful: BoolArray
    why: WhyArray
    er_db: FloatArray
    least_er_db: FloatArray
    is_bound: BoolArray
    wanted_power: float
    other_power: float
    samples: int

    def __len__(self) -> int:
        return len(self.klass)


def fold_tap(
    state: TapFold,
    samples: Reduced,
    rulings: Sequence[Ruling],
    from_us: int,
    until_us: int,
    *,
    next_at_us: int | None = None,
    interval_s: float | None = None,
) -> tuple[TapFold, TapSeconds]:
    """Classify the seconds from ``from_us`` up to ``until_us``, which follow those that gave ``state``.

    Args:
        samples: Of the span, sorted by time, shape (N,).
        rulings: Limits of the tap, one at a time of each quantity; those on derived quantities are left out.
        from_us, until_us: Whole seconds, µs.
        next_at_us: The first sample at or after ``until_us``; None where there is none near.
        interval_s: The declared time between samples, s; None: the median of recent spacings.
    Returns:
        The state behind the span, and its seconds. Cutting a run anywhere at whole seconds gives the same.
    Raises:
        ValueError: The span does not consist of whole seconds.
    """
    if from_us % US_PER_S or until_us % US_PER_S or until_us < from_us:
        raise ValueError(f"from_us={from_us} and until_us={until_us} must be whole seconds, in order; round them outwards.")
    joined = samples if state.last is None else sample.concatenate([state.last, samples])
    cover = _Cover.of(joined, _nominal_s(state, samples, interval_s), from_us, until_us, next_at_us)
    seconds = _judged(joined, cover, rulings, from_us, (until_us - from_us) // US_PER_S)
    last = joined.take(slice(len(joined) - 1, None)) if len(joined) else state.last
    return TapFold(last, pass_samples(state.interval, samples.at_us)), _with_figures(seconds, samples, from_us)


def _nominal_s(state: TapFold, samples: Reduced, declared_s: float | None) -> FloatArray:
    """Nominal interval of the held sample (if any) and of each new one, s."""
    if declared_s:
        known = np.full(len(samples) + (state.last is not None), declared_s)
    else:
        known = intervals_s(state.interval, samples.at_us)
        if state.last is not None:
            known = np.concatenate([[state.interval.interval_s or np.nan], known])
    return np.where(np.isfinite(known), known, UNKNOWN_INTERVAL_S)


@dataclass(frozen=True, slots=True)
class _Cover:
    """The K seconds that a sample covers, and by what.

    Attributes:
        second: Number of each in the span, shape (K,), rising.
        first: For a second with own samples the index of its first, else -1. held: Else the index of the sample before it.
    """

    second: IntArray
    first: IntArray
    held: IntArray

    @classmethod
    def of(cls, samples: Reduced, nominal_s: FloatArray, from_us: int, until_us: int, next_at_us: int | None) -> "_Cover":
        at_us, length = samples.at_us, (until_us - from_us) // US_PER_S
        second = (at_us - from_us) // US_PER_S
        following_us = np.append(at_us[1:], np.iinfo(np.int64).max if next_at_us is None else next_at_us)[: len(at_us)]
        nominal_us = np.round(nominal_s * US_PER_S).astype(np.int64)
        is_followed = following_us - at_us <= HOLD_INTERVALS * nominal_us
        until = np.where(is_followed, following_us, at_us + nominal_us)
        is_last = np.append(second[1:] != second[:-1], True)[: len(at_us)]
        first, held = np.full(length, -1), np.full(length, -1)
        for index in np.flatnonzero(is_last & (until // US_PER_S * US_PER_S > at_us // US_PER_S * US_PER_S + US_PER_S)).tolist():
            begin, end = int(second[index]) + 1, int((until[index] - from_us) // US_PER_S)
            if end > max(begin, 0):
                held[max(begin, 0) : end] = index
        own = np.flatnonzero((second >= 0) & np.append(True, second[1:] != second[:-1])[: len(at_us)])
        first[second[own]] = own
        held[second[own]] = -1
        covered = np.flatnonzero((first >= 0) | (held >= 0))
        return cls(covered, first[covered], held[covered])


def _judged(samples: Reduced, cover: _Cover, rulings: Sequence[Ruling], from_us: int, length: int) -> TapSeconds:
    """Classes, doubts and reasons of the span's seconds; figures still empty."""
    klass = np.full(length, LedgerClass.NO_READING, np.uint8)
    is_doubtful, why = np.zeros(length, bool), np.zeros(length, np.uint32)
    own = np.zeros(len(cover.second), np.uint8)
    own_doubtful, own_why = np.zeros(len(own), bool), np.zeros(len(own), np.uint32)
    is_ruled = np.zeros(len(own), bool)
    for quantity in QUANTITIES:
        level = _levels(rulings, quantity, from_us + cover.second * US_PER_S)
        in_force = np.isfinite(level)
        if not in_force.any():
            continue
        found, doubtful, reasons = _against(samples, quantity, cover, level)
        is_worse, is_equal = in_force & ((found > own) | ~is_ruled), in_force & is_ruled & (found == own)
        own_doubtful |= in_force & doubtful
        own_why[is_equal] |= reasons[is_equal]
        own_why[is_worse], own[is_worse] = reasons[is_worse], found[is_worse]
        is_ruled |= in_force
    own[~is_ruled], own_why[~is_ruled] = LedgerClass.UNTRUSTED, np.uint32(LedgerReason.NO_LIMIT)
    klass[cover.second], why[cover.second] = own, own_why
    is_doubtful[cover.second] = own_doubtful & (own == LedgerClass.GOOD)
    nothing = np.full(length, np.nan)
    return TapSeconds(klass, is_doubtful, why, nothing, nothing.copy(), np.zeros(length, bool), 0.0, 0.0, 0)


def _levels(rulings: Sequence[Ruling], quantity: Quantity, at_us: IntArray) -> FloatArray:
    """The level in force at each second, NaN where none."""
    level = np.full(len(at_us), np.nan)
    for ruling in rulings:
        if ruling.quantity is quantity:
            level[(at_us >= ruling.from_us) & (at_us < ruling.until_us)] = ruling.alarm
    return level


def _against(samples: Reduced, quantity: Quantity, cover: _Cover, level: FloatArray) -> tuple[ClassArray, BoolArray, WhyArray]:
    """Class, doubt and reasons of each covered second against its level."""
    entries, reasons = _covering(samples, quantity, cover)
    status = statuses(entries, level)
    klass = np.full(len(status), LedgerClass.GOOD, np.uint8)
    klass[status == Status.BELOW] = LedgerClass.BELOW
    klass[status == Status.UNTRUSTED] = LedgerClass.UNTRUSTED
    is_undecided = status == Status.UNDECIDED
    doubtful = is_undecided | (entries.is_doubtful & (status == Status.INSIDE))
    why = np.select(
        [klass == LedgerClass.BELOW, klass == LedgerClass.UNTRUSTED, doubtful],
        [np.uint32(_BELOW_BY[quantity]), reasons & np.uint32(UNTRUSTED_REASONS | NONE_REASONS),
         reasons & np.uint32(DOUBTFUL_REASONS)],
        _NO_REASON,
    ).astype(np.uint32)
    why[is_undecided] |= np.uint32(Reason.UNDECIDED)
    why[(klass == LedgerClass.UNTRUSTED) & (why == 0)] = np.uint32(Reason.UNDEFINED)
    return klass, doubtful, why


def _covering(samples: Reduced, quantity: Quantity, cover: _Cover) -> tuple[Seconds, WhyArray]:
    """What each covered second is judged by: its own samples together, else the one that holds."""
    own, held = seconds_of(samples, quantity), plain_samples_of(samples, quantity)
    firsts = np.searchsorted(own.at_us, samples.at_us, side="right") - 1
    is_own = cover.first >= 0
    index = np.where(is_own, firsts[np.maximum(cover.first, 0)], len(own) + cover.held)
    starts = np.searchsorted(samples.at_us, own.at_us)
    merged = np.bitwise_or.reduceat(samples.reasons[quantity], starts) if len(starts) else samples.reasons[quantity]
    reasons = np.concatenate([merged, samples.reasons[quantity]])[index]
    return concatenate([own, held]).take(index), reasons


def _with_figures(seconds: TapSeconds, samples: Reduced, from_us: int) -> TapSeconds:
    """The seconds with ER and sums of their own judged samples."""
    if not len(samples):
        return seconds
    entries = seconds_of(samples, Quantity.ER_DB)
    place = (entries.at_us - from_us) // US_PER_S
    shown = entries.shown()
    has_value = entries.is_judged & np.isfinite(shown)
    seconds.er_db[place] = np.where(np.isfinite(entries.mean), entries.mean, np.where(has_value, shown, np.nan))
    seconds.least_er_db[place] = np.where(has_value, shown, np.nan)
    seconds.is_bound[place] = has_value & ~np.isfinite(entries.worst)
    usable = is_usable(samples.trust[Quantity.ER_DB], samples.er_db)
    return TapSeconds(
        seconds.klass,
        seconds.is_doubtful,
        seconds.why,
        seconds.er_db,
        seconds.least_er_db,
        seconds.is_bound,
        float(np.sum(samples.wanted_power, where=usable)),
        float(np.sum(samples.other_power, where=usable)),
        int(np.count_nonzero(usable)),
    )
