"""Count, mean and M2 (sum of squared deviations) of groups, and their merge. Source: docs/formulas.md, F-17."""

import numpy as np

from analysis.quantities import BoolArray, FloatArray, IntArray
from analysis.rollup.groups import Groups

Moments = tuple[IntArray, FloatArray, FloatArray]


def group_moments(amount: FloatArray, usable: BoolArray, groups: Groups) -> Moments:
    """Moments of the usable rows of each group, in two passes.

    Args:
        amount: Any unit, shape (N,); only where ``usable`` need it be a number.
    Returns:
        Count, mean (0 where nothing was usable) and M2, each of shape (G,).
    """
    count = groups.sums(usable)
    some = np.maximum(count, 1)
    mean = groups.sums(np.where(usable, amount, 0.0)) / some
    deviation = np.where(usable, amount - np.repeat(mean, groups.sizes), 0.0)
    slip = groups.sums(deviation)
    return count, mean + slip / some, np.maximum(groups.sums(deviation**2) - slip**2 / some, 0.0)


def merged_moments(count: IntArray, mean: FloatArray, m2: FloatArray, groups: Groups) -> Moments:
    """Chan's merge of many parts at once: M2 = sum of M2 + sum of n (mean - whole mean)^2; parts of count 0 are neutral."""
    total = groups.sums(count)
    some = np.maximum(total, 1)
    rough = groups.sums(mean * count) / some
    offset = mean - np.repeat(rough, groups.sizes)
    slip = groups.sums(count * offset) / some
    merged_m2 = groups.sums(m2 + count * (offset - np.repeat(slip, groups.sizes)) ** 2)
    return total, rough + slip, merged_m2
