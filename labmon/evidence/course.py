"""The course of a run for its figures: bins of equal length, filled piece by piece."""

from dataclasses import dataclass

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import FloatArray, IntArray, er_db_from_leak
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import is_usable

BINS = 480


@dataclass(slots=True)
class Course:
    """Extinction ratio of one tap by bin, shape (B,) each; +inf, -inf and 0 where nothing was judged."""

    from_us: int
    bin_us: int
    least_db: FloatArray
    most_db: FloatArray
    wanted: FloatArray
    other: FloatArray

    @classmethod
    def of(cls, from_us: int, until_us: int) -> "Course":
        """Empty, in whole seconds a bin."""
        seconds = (until_us - from_us) // 1_000_000
        bin_s = max(1, -(-seconds // BINS))
        count = -(-seconds // bin_s)
        return cls(from_us, bin_s * 1_000_000, np.full(count, np.inf), np.full(count, -np.inf), np.zeros(count), np.zeros(count))

    def take(self, reduced: Reduced) -> None:
        """Fill in samples; only judged ones of the run count."""
        place: IntArray = (reduced.at_us - self.from_us) // self.bin_us
        chosen = is_usable(reduced.trust[Quantity.ER_DB], reduced.er_db) & (place >= 0) & (place < len(self.least_db))
        place, er_db = place[chosen], reduced.er_db[chosen]
        np.minimum.at(self.least_db, place, er_db)
        np.maximum.at(self.most_db, place, er_db)
        count = len(self.wanted)
        self.wanted += np.bincount(place, weights=np.nan_to_num(reduced.wanted_power[chosen]), minlength=count)
        self.other += np.bincount(place, weights=np.nan_to_num(reduced.other_power[chosen]), minlength=count)

    @property
    def mean_db(self) -> FloatArray:
        """ER of sums of each bin, dB; NaN where nothing was judged."""
        both = (self.wanted > 0.0) & (self.other > 0.0)
        return er_db_from_leak(np.where(both, self.other, np.nan) / np.where(both, self.wanted, 1.0))
