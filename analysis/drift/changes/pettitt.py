"""Pettitt's rank test for one change of level."""

from dataclasses import dataclass

import numpy as np
from scipy import stats

from analysis.quantities import FloatArray


@dataclass(frozen=True, slots=True)
class Pettitt:
    """K = max |U|; ``index``: first reading of the new level; ``chance``: approximate p-value for independent readings."""

    statistic: float
    index: int
    chance: float


def pettitt(level: FloatArray) -> Pettitt:
    """Test for one change at an unknown place, by ranks, so that outliers and the shape of the noise do not matter.

    Args:
        level: Readings in order, shape (N,), finite, N ≥ 2; spacing does not matter.
    Returns:
        U_t = 2 Σ_{i≤t} rank_i - t (n + 1); chance min(1, 2 exp(-6 K²/(n³ + n²))). Autocorrelation makes the chance far too small:
        thin the readings, or give means over spans longer than it lasts. Source: docs/formulas.md, F-89.
    """
    level = np.asarray(level, np.float64)
    count = len(level)
    if count < 2 or not np.all(np.isfinite(level)):
        raise ValueError("level must hold two finite readings or more; leave NaN out.")
    place = np.arange(1, count + 1)
    u = np.abs(2.0 * np.cumsum(stats.rankdata(level)) - place * (count + 1.0))[:-1]
    index = int(np.argmax(u)) + 1
    largest = float(u[index - 1])
    return Pettitt(largest, index, float(min(1.0, 2.0 * np.exp(-6.0 * largest**2 / (count**3 + count**2)))))
