"""Summaries that merge: count, mean, spread, range and quantiles of a quantity, so that parts give the whole.

For directions see `analysis.drift.sphere.DirectionSums`, for ER in dB `analysis.rollup.histogram`. Merging is commutative
and associative: counts, range, quantiles exactly, mean and M2 to rounding (about 1e-15 of the largest part).
"""

import math
from dataclasses import dataclass
from functools import reduce

import numpy as np

from analysis.quantities import FloatArray
from analysis.rollup.groups import one_group
from analysis.rollup.moments import group_moments, merged_moments
from analysis.rollup.sketch import DEFAULT_ERROR, Sketch, merge_sketches, sketch_of, sketch_quantiles


@dataclass(frozen=True, slots=True)
class Summary:
    """What is kept of N finite values of one quantity.

    Attributes:
        count: N.
        mean: 0 for N = 0. ``m2``: sum of squared deviations from it.
        min, max: NaN for N = 0.
        sketch: Counts for quantiles, meant for positive quantities (powers, leaks, angles).
    """

    count: int
    mean: float
    m2: float
    min: float
    max: float
    sketch: Sketch

    @property
    def sd(self) -> float:
        """Sample standard deviation sqrt(M2/(N - 1)), in the quantity's unit; NaN below N = 2."""
        return math.sqrt(self.m2 / (self.count - 1)) if self.count > 1 else math.nan

    def quantiles(self, shares: FloatArray) -> FloatArray:
        """Values of rank ceil(q N) to the sketch's relative error; NaN where the rank falls among values not above 0."""
        return sketch_quantiles(self.sketch, shares)


def summary_of(values: FloatArray, relative_error: float = DEFAULT_ERROR) -> Summary:
    """Summary of values, any unit and shape; NaN and infinite ones are left out. Source: docs/formulas.md, F-66, F-67."""
    values = np.asarray(values, dtype=np.float64).ravel()
    usable = np.isfinite(values)
    groups = one_group(len(values))
    sketch = sketch_of(values, relative_error)
    if not usable.any():
        return Summary(0, 0.0, 0.0, math.nan, math.nan, sketch)
    count, mean, m2 = group_moments(values, usable, groups)
    known = values if usable.all() else values[usable]
    return Summary(int(count[0]), float(mean[0]), float(m2[0]), float(known.min()), float(known.max()), sketch)


def merged(*parts: Summary) -> Summary:
    """The summary of all parts together; an empty part changes nothing.

    Raises:
        ValueError: No part, or parts whose sketches differ in relative error.
    """
    if not parts:
        raise ValueError("merged() takes at least one summary; summary_of([]) is the empty one.")
    count, mean, m2 = (np.array([getattr(part, name) for part in parts]) for name in ("count", "mean", "m2"))
    total, whole_mean, whole_m2 = merged_moments(count, mean, m2, one_group(len(parts)))
    low, high = (np.array([getattr(part, name) for part in parts]) for name in ("min", "max"))
    sketch = reduce(merge_sketches, (part.sketch for part in parts))
    return Summary(int(total[0]), float(whole_mean[0]), float(whole_m2[0]), float(np.fmin.reduce(low)),
                   float(np.fmax.reduce(high)), sketch)  # fmt: skip
