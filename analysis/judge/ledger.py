"""The ledger of a run: several taps' seconds as one account, its intervals and totals. Rule: docs/formulas.md, F-160.

Every second is in exactly one class; of several taps below > no reading > untrusted > good.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from analysis.judge.ledger_tap import ClassArray, LedgerClass, LedgerReason, TapSeconds, WhyArray
from analysis.quantities import BoolArray, FloatArray, IntArray, er_db_from_leak

#: Bits of `Account.taps`: so many taps can be told apart.
MOST_TAPS = 64


@dataclass(slots=True)
class Account:
    """M seconds of a run, shape (M,) each; taps are added one after the other.

    Attributes:
        klass, is_doubtful, why: As of `TapSeconds`, over all taps added.
        taps: Bit k is set where tap k has the second's class (and, for a doubtful second, where it is doubtful there).
        count: Taps added.
    """

    klass: ClassArray
    is_doubtful: BoolArray
    why: WhyArray
    taps: NDArray[np.uint64]
    count: int = 0

    @classmethod
    def of(cls, length_s: int) -> "Account":
        """Before the first tap; an account without any tap has no reading at all."""
        return cls(
            np.full(length_s, LedgerClass.NO_READING, np.uint8),
            np.zeros(length_s, bool),
            np.zeros(length_s, np.uint32),
            np.zeros(length_s, np.uint64),
        )

    def __len__(self) -> int:
        return len(self.klass)


def add_tap(account: Account, tap: TapSeconds) -> None:
    """Take another tap's seconds into the account.

    Raises:
        ValueError: It has another length, or is one tap too many.
    """
    if len(tap) != len(account) or account.count >= MOST_TAPS:
        raise ValueError(f"the tap has {len(tap)} s for an account of {len(account)} s with {account.count} taps; give each "
                         f"of at most {MOST_TAPS} taps the run's whole length.")
    bit = np.uint64(1 << account.count)
    is_worse = tap.klass > account.klass if account.count else np.ones(len(tap), bool)
    is_equal = (tap.klass == account.klass) & ~is_worse
    adds = is_equal & ((tap.klass != LedgerClass.GOOD) | tap.is_doubtful)
    account.why[adds] |= tap.why[adds]
    account.taps[adds] |= bit
    account.klass[is_worse], account.why[is_worse] = tap.klass[is_worse], tap.why[is_worse]
    account.taps[is_worse] = np.where((tap.klass != LedgerClass.GOOD) | tap.is_doubtful, bit, np.uint64(0))[is_worse]
    account.is_doubtful |= tap.is_doubtful
    account.is_doubtful &= account.klass == LedgerClass.GOOD
    account.count += 1


def declare_unusable(account: Account, spans: Iterable[tuple[int, int]]) -> None:
    """Take half-open spans (seconds of the run) away from good: a person says they are not to be used. Nothing becomes good."""
    for first, last in spans:
        part = slice(max(first, 0), max(last, 0))
        is_good = account.klass[part] == LedgerClass.GOOD
        account.klass[part] = np.where(is_good, LedgerClass.UNTRUSTED, account.klass[part])
        account.why[part] = np.where(is_good, np.uint32(LedgerReason.DECLARED), account.why[part])
        account.taps[part] = np.where(is_good, np.uint64(0), account.taps[part])
        account.is_doubtful[part] &= ~is_good


def note_holes(account: Account, spans: Iterable[tuple[int, int, LedgerReason]]) -> None:
    """Say of seconds without reading why readings that were there cannot be had (first and behind-last second, reason)."""
    for first, last, reason in spans:
        part = slice(max(first, 0), max(last, 0))
        is_missing = account.klass[part] == LedgerClass.NO_READING
        account.why[part] |= np.where(is_missing, np.uint32(reason), np.uint32(0))


@dataclass(frozen=True, slots=True)
class Intervals:
    """K stretches of one class, doubt and set of taps, in order and without break, shape (K,) each.

    Attributes:
        first_s: Second of the run with which each begins. length_s: How many it has.
        why: All reasons met in it. taps: As of `Account`.
    """

    first_s: IntArray
    length_s: IntArray
    klass: ClassArray
    is_doubtful: BoolArray
    why: WhyArray
    taps: NDArray[np.uint64]

    def __len__(self) -> int:
        return len(self.first_s)


def intervals_of(account: Account) -> Intervals:
    """The account as stretches; an account of no seconds has none."""
    count = len(account)
    if not count:
        empty = np.zeros(0, np.int64)
        return Intervals(empty, empty, account.klass, account.is_doubtful, account.why, account.taps)
    is_new = np.zeros(count, bool)
    is_new[0] = True
    for row in (account.klass, account.is_doubtful, account.taps):
        is_new[1:] |= row[1:] != row[:-1]
    first = np.flatnonzero(is_new)
    return Intervals(
        first,
        np.diff(first, append=count),
        account.klass[first],
        account.is_doubtful[first],
        np.bitwise_or.reduceat(account.why, first),
        account.taps[first],
    )


@dataclass(frozen=True, slots=True)
class Totals:
    """Seconds of each class; together the run's length. ``doubtful_s`` is of the good ones.

    Attributes:
        longest_good_s: The longest unbroken good stretch; it begins ``longest_good_from_s`` into the run (None where none is).
    """

    length_s: int
    good_s: int
    below_s: int
    untrusted_s: int
    no_reading_s: int
    doubtful_s: int
    longest_good_s: int
    longest_good_from_s: int | None

    @property
    def judged_s(self) -> int:
        """Seconds with trusted data: good or below the limit."""
        return self.good_s + self.below_s

    @property
    def usable_share(self) -> float:
        """Good seconds over all; NaN for a run of no length."""
        return self.good_s / self.length_s if self.length_s else float("nan")

    @property
    def trusted_share(self) -> float:
        """Judged seconds over all; NaN for a run of no length."""
        return self.judged_s / self.length_s if self.length_s else float("nan")


def totals_of(account: Account) -> Totals:
    """The account's sums."""
    of_class = np.bincount(account.klass, minlength=len(LedgerClass))
    edges = np.diff(np.concatenate([[0], (account.klass == LedgerClass.GOOD).astype(np.int8), [0]]))
    begins, ends = np.flatnonzero(edges == 1), np.flatnonzero(edges == -1)
    longest = int(np.argmax(ends - begins)) if len(begins) else None
    return Totals(
        len(account),
        *(int(of_class[one]) for one in (LedgerClass.GOOD, LedgerClass.BELOW, LedgerClass.UNTRUSTED, LedgerClass.NO_READING)),
        int(np.count_nonzero(account.is_doubtful)),
        0 if longest is None else int(ends[longest] - begins[longest]),
        None if longest is None else int(begins[longest]),
    )


@dataclass(frozen=True, slots=True)
class TapFigures:
    """What the judged samples of a tap say of the run, dB; None where nothing was judged.

    Attributes:
        mean_er_db: ER of sums (Σ other / Σ wanted), never a mean of dB. quantile_er_db: 5 % of the judged seconds' ER lie below.
        least_er_db: The worst second; at least this where ``is_bound``.
        samples: Judged samples. judged_s: Seconds with one.
    """

    mean_er_db: float | None
    quantile_er_db: float | None
    least_er_db: float | None
    is_bound: bool
    samples: int
    judged_s: int


def figures_of(parts: Sequence[TapSeconds], *, share: float = 0.05) -> TapFigures:
    """Figures of one tap's whole run from its stretches, in order. Source of the mean: docs/formulas.md, F-06."""
    er_db = np.concatenate([part.er_db for part in parts]) if parts else np.zeros(0)
    least = np.concatenate([part.least_er_db for part in parts]) if parts else np.zeros(0)
    is_bound = np.concatenate([part.is_bound for part in parts]) if parts else np.zeros(0, bool)
    known, has_least = er_db[np.isfinite(er_db)], np.flatnonzero(np.isfinite(least))
    worst = int(has_least[np.argmin(least[has_least])]) if len(has_least) else None
    wanted, other = (sum(getattr(part, name) for part in parts) for name in ("wanted_power", "other_power"))
    mean = float(er_db_from_leak(other / wanted)) if wanted > 0.0 and other > 0.0 else None
    return TapFigures(
        mean,
        float(np.quantile(known, share)) if len(known) else None,
        None if worst is None else float(least[worst]),
        worst is not None and bool(is_bound[worst]),
        sum(part.samples for part in parts),
        len(known),
    )


def joined(parts: Sequence[TapSeconds]) -> TapSeconds:
    """One tap's stretches, in order, as one."""
    arrays: list[FloatArray] = [
        np.concatenate([getattr(part, name) for part in parts])
        for name in ("klass", "is_doubtful", "why", "er_db", "least_er_db", "is_bound")
    ]
    return TapSeconds(
        *arrays,  # type: ignore[arg-type]
        sum(part.wanted_power for part in parts),
        sum(part.other_power for part in parts),
        sum(part.samples for part in parts),
    )
