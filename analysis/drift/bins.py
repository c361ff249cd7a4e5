"""Means over bins of time."""

import numpy as np

from analysis.quantities import FloatArray, IntArray


def bin_means(at_us: IntArray, level: FloatArray, tau_us: int) -> tuple[IntArray, FloatArray]:
    """Number and mean of every bin that holds a sample, shape (M,) or (M, …) for levels of shape (N, …)."""
    number = at_us // tau_us
    first = np.flatnonzero(np.diff(number, prepend=number[:1] - 1))
    size = np.diff(first, append=len(number))
    if not len(first):
        return number, np.zeros((0, *np.shape(level)[1:]))
    total = np.add.reduceat(np.asarray(level, dtype=np.float64), first, axis=0)
    return number[first], total / size.reshape(-1, *([1] * (total.ndim - 1)))
