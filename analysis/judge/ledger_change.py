"""Two versions of one run's ledger side by side: which seconds changed their class."""

from dataclasses import dataclass

import numpy as np

from analysis.judge.ledger import Intervals
from analysis.judge.ledger_tap import ClassArray, LedgerClass
from analysis.quantities import IntArray


@dataclass(frozen=True, slots=True)
class LedgerChange:
    """What became of the seconds.

    Attributes:
        counts: Seconds by class before (row) and after (column), shape (4, 4); they sum to the run's length.
        first_s, length_s: Stretches that changed, in order, shape (K,). before, after: Their classes.
    """

    counts: IntArray
    first_s: IntArray
    length_s: IntArray
    before: ClassArray
    after: ClassArray

    @property
    def changed_s(self) -> int:
        """Seconds that are now in another class."""
        return int(self.length_s.sum())


def change_between(before: Intervals, after: Intervals) -> LedgerChange:
    """Compare two versions.

    Raises:
        ValueError: They account for different numbers of seconds.
    """
    old, new = (np.repeat(one.klass, one.length_s) for one in (before, after))
    if len(old) != len(new):
        raise ValueError(f"one version has {len(old)} s, the other {len(new)} s; compare versions of one run.")
    kinds = len(LedgerClass)
    counts = np.bincount(old.astype(np.int64) * kinds + new, minlength=kinds * kinds).reshape(kinds, kinds)
    is_new = np.ones(len(old), bool)
    is_new[1:] = (old[1:] != old[:-1]) | (new[1:] != new[:-1])
    first = np.flatnonzero(is_new)
    length = np.diff(first, append=len(old))
    has_changed = old[first] != new[first]
    first, length = first[has_changed], length[has_changed]
    return LedgerChange(counts, first, length, old[first], new[first])
