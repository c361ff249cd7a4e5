"""Quantiles of positive values (powers, leaks) to a stated relative error, by counts that merge by adding.

Beside the histogram of ER in dB (`analysis.rollup.histogram`): a relative error makes no sense for ER, which crosses 0 dB.
Source: docs/formulas.md, F-67.
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.quantities import FloatArray, IntArray

DEFAULT_ERROR: Final = 0.01


@dataclass(frozen=True, slots=True)
class Sketch:
    """Counts of B filled buckets, sorted by bucket, each once.

    Attributes:
        relative_error: Largest relative error of a quantile, between 0 and 1.
        bucket: ceil(log_gamma value) with gamma = (1 + error)/(1 - error), shape (B,).
        count: Values in the bucket, above 0, shape (B,).
        not_positive: Values at or below 0; they rank below all others.
    """

    relative_error: float
    bucket: IntArray
    count: IntArray
    not_positive: int = 0

    @property
    def total(self) -> int:
        """How many values were counted."""
        return int(self.count.sum()) + self.not_positive


def sketch_of(values: FloatArray, relative_error: float = DEFAULT_ERROR) -> Sketch:
    """Sketch of values of any unit and shape; NaN and infinite values are left out.

    Raises:
        ValueError: ``relative_error`` is not between 0 and 1.
    """
    if not 0.0 < relative_error < 1.0:
        raise ValueError(f"relative_error={relative_error!r} must lie between 0 and 1; 0.01 is usual.")
    finite = np.asarray(values, dtype=np.float64)
    finite = finite[np.isfinite(finite)]
    positive = finite[finite > 0.0]
    bucket = np.ceil(np.log(positive) / _log_gamma(relative_error)).astype(np.int64)
    if not len(bucket):
        return Sketch(relative_error, bucket, bucket, len(finite))
    low = int(bucket.min())
    dense = np.bincount(bucket - low)
    filled = np.flatnonzero(dense)
    return Sketch(relative_error, filled + low, dense[filled], len(finite) - len(positive))


def merge_sketches(one: Sketch, other: Sketch) -> Sketch:
    """The sketch of both together: exactly the sketch of the whole.

    Raises:
        ValueError: The relative errors differ.
    """
    if one.relative_error != other.relative_error:
        raise ValueError(f"relative errors {one.relative_error} and {other.relative_error} differ; make both sketches with one.")
    bucket, place = np.unique(np.concatenate([one.bucket, other.bucket]), return_inverse=True)
    count = np.zeros(len(bucket), dtype=np.int64)
    np.add.at(count, place, np.concatenate([one.count, other.count]))
    return Sketch(one.relative_error, bucket, count, one.not_positive + other.not_positive)


def sketch_quantiles(sketch: Sketch, shares: FloatArray) -> FloatArray:
    """Values of rank ceil(q n) (at least the first), each within the relative error, shape of ``shares``.

    Returns:
        In the values' unit; NaN of an empty sketch and where the rank falls among values not above 0.
    Raises:
        ValueError: A share lies outside 0 to 1.
    """
    shares = np.asarray(shares, dtype=np.float64)
    if not ((shares >= 0.0) & (shares <= 1.0)).all():
        raise ValueError(f"shares={shares!r} must lie within 0 and 1.")
    if not len(sketch.bucket):
        return np.full(shares.shape, np.nan)
    reached = sketch.not_positive + np.cumsum(sketch.count)
    rank = np.clip(np.ceil(shares * reached[-1]), 1, reached[-1])
    found = representative(sketch.bucket[np.searchsorted(reached, rank)], sketch.relative_error)
    return np.where(rank > sketch.not_positive, found, np.nan)


def representative(bucket: IntArray, relative_error: float) -> FloatArray:
    """Value that stands for a bucket: 2 gamma^i / (gamma + 1), which is within the error of all values in it."""
    log_gamma = _log_gamma(relative_error)
    return 2.0 * np.exp(np.asarray(bucket) * log_gamma) / (math.exp(log_gamma) + 1.0)


def _log_gamma(relative_error: float) -> float:
    return math.log1p(relative_error) - math.log1p(-relative_error)
