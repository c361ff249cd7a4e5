"""First passage of a Brownian motion whose drift is known only to within an error: wider than with the best drift alone.

Units and broadcasting as in `drifted_walk`; ``drift_error`` is the standard deviation of the drift, u/s, not below 0.
"""

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import log_ndtr, ndtr

from analysis.quantities import FloatArray

HALVINGS = 60


def uncertain_passage_probability(
    distance: ArrayLike, drift: ArrayLike, drift_error: ArrayLike, spread: ArrayLike, time_s: ArrayLike
) -> FloatArray:
    """Chance that the barrier has been reached by a time, averaged over a normal drift.

    Args:
        distance, drift, spread: See `drifted_walk`; spread above 0. drift_error: u/s. time_s: s, above 0 and finite.
    Returns:
        Dimensionless in [0, 1]; 1 where ``distance`` ≤ 0, NaN where an input is NaN.
    Source: docs/formulas.md, F-130.
    """
    a, v, e, s, t = (np.asarray(part, np.float64) for part in (distance, drift, drift_error, spread, time_s))
    with np.errstate(invalid="ignore", over="ignore", divide="ignore"):
        s2, e2 = s**2, e**2
        root = np.sqrt(s2 * t + e2 * t**2)
        reflected = 2.0 * v * a / s2 + 2.0 * e2 * a**2 / s2**2
        mirrored = -(2.0 * e2 * a * t + s2 * (v * t + a)) / (s2 * root)
        chance = ndtr((v * t - a) / root) + np.exp(np.minimum(reflected + log_ndtr(mirrored), 0.0))
    return np.where(np.isnan(a + v + e + s + t), np.nan, np.where(a <= 0.0, 1.0, np.minimum(chance, 1.0)))


def uncertain_passage_quantile_s(
    distance: ArrayLike, drift: ArrayLike, drift_error: ArrayLike, spread: ArrayLike, probability: float, horizon_s: float
) -> FloatArray:
    """Time by which the barrier has been reached with a given chance, s; inf where that is later than the horizon.

    Args:
        distance, drift, drift_error, spread: As of `uncertain_passage_probability`.
        probability: In (0, 1). horizon_s: s, above 0; found to within horizon_s / 2**60.
    Raises:
        ValueError: Probability or horizon out of range.
    Source: docs/formulas.md, F-130.
    """
    if not (0.0 < probability < 1.0 and 0.0 < horizon_s < np.inf):
        raise ValueError(f"probability={probability!r} must lie in (0, 1), horizon_s={horizon_s!r} s be above 0 and finite.")
    a, v, e, s = np.broadcast_arrays(*(np.asarray(part, np.float64) for part in (distance, drift, drift_error, spread)))
    is_reached = uncertain_passage_probability(a, v, e, s, horizon_s) >= probability
    low, high = np.zeros(a.shape), np.full(a.shape, horizon_s)
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        is_late = uncertain_passage_probability(a, v, e, s, middle) < probability
        low, high = np.where(is_late, middle, low), np.where(is_late, high, middle)
    found = np.where(is_reached, np.where(a <= 0.0, 0.0, high), np.inf)
    return np.where(np.isnan(a + v + e + s), np.nan, found)
