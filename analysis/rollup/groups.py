"""Neighbouring rows taken together, and sums over each group."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from analysis.quantities import FloatArray, IntArray


@dataclass(frozen=True, slots=True)
class Groups:
    """Group g holds rows first[g] up to first[g + 1]; the last one ends at ``count``.

    Attributes:
        first: First row of each group, rising, shape (G,).
        count: Number of rows.
    """

    first: IntArray
    count: int

    @property
    def sizes(self) -> IntArray:
        """Rows of each group, shape (G,)."""
        return np.diff(self.first, append=self.count)

    def of_sample(self) -> IntArray:
        """Each row's group, shape (count,)."""
        return np.repeat(np.arange(len(self.first)), self.sizes)

    def sums(self, amount: NDArray[Any]) -> NDArray[Any]:
        """Sum over each group, shape (G, …); booleans are counted."""
        kind = np.int64 if amount.dtype == bool else amount.dtype
        if not len(self.first):
            return np.zeros((0, *amount.shape[1:]), dtype=kind)
        return np.add.reduceat(amount, self.first, axis=0, dtype=kind)

    def minima(self, amount: FloatArray) -> FloatArray:
        """Least number of each group, shape (G,); NaN where there is none."""
        return np.fmin.reduceat(amount, self.first) if len(self.first) else np.zeros(0)

    def maxima(self, amount: FloatArray) -> FloatArray:
        """Largest number of each group, shape (G,); NaN where there is none."""
        return np.fmax.reduceat(amount, self.first) if len(self.first) else np.zeros(0)


def one_group(count: int) -> Groups:
    """All rows as one group; no group where there is no row."""
    return Groups(np.zeros(min(1, count), dtype=np.int64), count)
