"""First passage of a Brownian motion with drift to a barrier: the inverse-Gaussian law and its defective relatives.

``distance`` is the way to the barrier, positive on the near side, ``drift`` the speed towards it, ``spread`` the standard
deviation gained in √1 s; units: u, u/s, u/√s with one unit u (degrees on the sphere). All arguments broadcast. A spread not
above 0 or an input that is NaN gives NaN.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import log_ndtr, ndtr, ndtri

from analysis.quantities import FloatArray

DISCRETE_SHIFT = 0.582597157939010
"""-ζ(1/2)/√(2π): how far, in spread·√step, a barrier seen only every step seems to stand further out."""
HALVINGS = 200


@dataclass(frozen=True, slots=True)
class PassageMoments:
    """Mean, s; variance, s²; most likely time, s: of the passage time where the drift leads to the barrier, else NaN."""

    mean_s: FloatArray
    variance_s2: FloatArray
    mode_s: FloatArray


def passage_probability(distance: ArrayLike, drift: ArrayLike, spread: ArrayLike, time_s: ArrayLike) -> FloatArray:
    """Chance that the barrier has been reached by a time.

    Args:
        distance, drift, spread: See the module. time_s: Time from now, s, ≥ 0; inf is allowed.
    Returns:
        Dimensionless in [0, 1], rising with time; 1 where ``distance`` ≤ 0. Formed in logarithms: exp(2va/s²) alone overflows.
    Source: docs/formulas.md, F-95.
    """
    a, v, s, t = _floats(distance, drift, spread, time_s)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        root = s * np.sqrt(t)
        chance = ndtr((v * t - a) / root) + np.exp(2.0 * v * a / s**2 + log_ndtr(-(v * t + a) / root))
    chance = np.where(t == 0.0, 0.0, np.where(np.isinf(t), reach_probability(a, v, s), chance))
    return np.where(np.isnan(a + v + s + t), np.nan, np.where(a <= 0.0, 1.0, np.minimum(chance, 1.0)))


def passage_density(distance: ArrayLike, drift: ArrayLike, spread: ArrayLike, time_s: ArrayLike) -> FloatArray:
    """Density of the passage time, 1/s; arguments as `passage_probability`; NaN where ``distance`` ≤ 0. Source: F-95."""
    a, v, s, t = _floats(distance, drift, spread, time_s)
    a = np.where(a > 0.0, a, np.nan)
    with np.errstate(divide="ignore", invalid="ignore"):
        density = a / np.sqrt(2.0 * np.pi * s**2 * t**3) * np.exp(-((a - v * t) ** 2) / (2.0 * s**2 * t))
    return np.where(np.isnan(a + v + s + t), np.nan, np.where(t > 0.0, density, 0.0))


def reach_probability(distance: ArrayLike, drift: ArrayLike, spread: ArrayLike) -> FloatArray:
    """Chance that the barrier is ever reached: 1, or exp(-2|v|a/s²) for a drift away from it. Source: F-96."""
    a, v, s = _floats(distance, drift, spread)
    return np.exp(np.minimum(2.0 * v * np.maximum(a, 0.0) / s**2, 0.0))


def passage_quantile_s(distance: ArrayLike, drift: ArrayLike, spread: ArrayLike, probability: ArrayLike) -> FloatArray:
    """Time by which the barrier has been reached with a given chance.

    Args:
        distance, drift, spread: See the module. probability: In (0, 1).
    Returns:
        s; 0 where ``distance`` ≤ 0; inf where the chance is never had (drift away), or is only beyond 1e300 s.
    Raises:
        ValueError: A probability outside (0, 1).
    Source: docs/formulas.md, F-96.
    """
    a, v, s, p = _floats(distance, drift, spread, probability)
    if np.any((p <= 0.0) | (p >= 1.0)):
        raise ValueError("probability must lie between 0 and 1, ends excluded.")
    driftless_s = (np.maximum(a, 0.0) / (s * ndtri(1.0 - 0.5 * p))) ** 2
    is_never = p >= reach_probability(a, v, s)
    wanted = np.isfinite(driftless_s) & (driftless_s > 0.0) & ~(is_never & (v < 0.0))
    low = high = np.log(np.where(wanted, driftless_s, 1.0))
    for step in 2.0 ** np.arange(10):                           # reach out by factors of e, e², e⁴ …
        high = np.where(wanted & (passage_probability(a, v, s, np.exp(high)) < p), high + step, high)
        low = np.where(wanted & (passage_probability(a, v, s, np.exp(low)) > p), low - step, low)
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        if np.all((middle == low) | (middle == high)):
            break
        is_below = passage_probability(a, v, s, np.exp(middle)) < p
        low, high = np.where(is_below, middle, low), np.where(is_below, high, middle)
    found = np.where(wanted, np.exp(high), np.where(a <= 0.0, 0.0, np.inf))
    return np.where(np.isnan(a + v + s + p), np.nan, np.where(found > 1e300, np.inf, found))


def passage_moments(distance: ArrayLike, drift: ArrayLike, spread: ArrayLike) -> PassageMoments:
    """Moments of the inverse-Gaussian law. The mean lies far above the median: show quantiles. Source: F-96."""
    a, v, s = _floats(distance, drift, spread)
    v = np.where((v > 0.0) & (a > 0.0), v, np.nan)
    mean, shape = a / v, (a / s) ** 2
    ratio = 1.5 * mean / shape
    return PassageMoments(mean, a * s**2 / v**3, mean / (np.sqrt(1.0 + ratio**2) + ratio))


def discrete_shift(spread: ArrayLike, step_s: ArrayLike) -> FloatArray:
    """How much further out a barrier stands for samples every ``step_s``, unit of the level: 0.5826 s √dt. Source: F-97."""
    spread, step_s = _floats(spread, step_s)
    return DISCRETE_SHIFT * spread * np.sqrt(step_s)


def _floats(*parts: ArrayLike) -> list[FloatArray]:
    arrays = [np.asarray(part, np.float64) for part in parts]
    if len(arrays) > 2:
        arrays[2] = np.where(arrays[2] > 0.0, arrays[2], np.nan)
    return [np.array(part) for part in np.broadcast_arrays(*arrays)]
