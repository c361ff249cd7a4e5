"""Allan deviation of a level (ER, angle, temperature), with gaps respected."""

from dataclasses import dataclass

import numpy as np

from analysis.quantities import US_PER_S, FloatArray, IntArray


@dataclass(frozen=True, slots=True)
class AllanPoint:
    """Allan deviation at one averaging time.

    Attributes:
        tau_s: Averaging time, s. ``deviation``: in the level's unit, NaN without a pair.
        pairs: Adjacent pairs of bins that it rests on; a bin that is missing breaks the chain.
    """

    tau_s: float
    deviation: float
    pairs: int


def allan_deviation(at_us: IntArray, level: FloatArray, tau_s: float) -> AllanPoint:
    """Allan deviation from means over bins of ``tau_s``, adjacent bins only.

    Args:
        at_us: Times, µs, shape (N,), sorted; any spacing.
        level: The level itself (not its integral), shape (N,), finite.
        tau_s: Bin length, s; bins start at whole multiples of it since 1970 UTC.
    Returns:
        sqrt(mean of (next mean - mean)^2 / 2). Gaps are never closed up. Source: docs/formulas.md, F-19.
    """
    tau_us = round(tau_s * US_PER_S)
    if tau_us <= 0:
        raise ValueError(f"tau_s={tau_s!r} must be above 0.")
    bins, means = bin_means(at_us, level, tau_us)
    steps = np.diff(means)[np.diff(bins) == 1]
    deviation = float(np.sqrt(np.mean(steps**2) / 2.0)) if len(steps) else float("nan")
    return AllanPoint(tau_s, deviation, len(steps))


def bin_means(at_us: IntArray, level: FloatArray, tau_us: int) -> tuple[IntArray, FloatArray]:
    """Number and mean of every bin that holds a sample, shape (M,) or (M, …) for levels of shape (N, …)."""
    number = at_us // tau_us
    first = np.flatnonzero(np.diff(number, prepend=number[:1] - 1))
    size = np.diff(first, append=len(number))
    if not len(first):
        return number, np.zeros((0, *np.shape(level)[1:]))
    total = np.add.reduceat(np.asarray(level, dtype=np.float64), first, axis=0)
    return number[first], total / size.reshape(-1, *([1] * (total.ndim - 1)))
