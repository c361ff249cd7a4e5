"""Continuous ranked probability score: how far a forecast distribution is from the one value that came, in its unit."""

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import ndtr

from analysis.quantities import FloatArray


def crps_gaussian(mean: ArrayLike, sigma: ArrayLike, observed: ArrayLike) -> FloatArray:
    """CRPS of Gaussian forecasts.

    Args:
        mean, sigma, observed: In one unit, broadcast; ``sigma`` ≥ 0.
    Returns:
        Score in that unit, ≥ 0, 0 best; |observed - mean| for sigma = 0; NaN where an input is NaN.
    Raises:
        ValueError: A sigma is below 0.
    Source: docs/formulas.md, F-107.
    """
    mean, sigma, observed = np.broadcast_arrays(*(np.asarray(part, np.float64) for part in (mean, sigma, observed)))
    if np.any(sigma < 0.0):
        raise ValueError("sigma must not be below 0; pass standard deviations.")
    z = np.divide(observed - mean, sigma, out=np.zeros_like(sigma), where=sigma > 0.0)
    density = np.exp(-0.5 * z**2) / np.sqrt(2.0 * np.pi)
    spread = sigma * (z * (2.0 * ndtr(z) - 1.0) + 2.0 * density - 1.0 / np.sqrt(np.pi))
    return np.where(sigma == 0.0, np.abs(observed - mean), spread)


def crps_ensemble(members: ArrayLike, observed: ArrayLike) -> FloatArray:
    """CRPS of the step distribution of M members: mean |x - y| - Σ|x_i - x_j| / (2 M²).

    Args:
        members: Shape (..., M), M ≥ 1. observed: Shape (...).
    Returns:
        Shape (...), in the members' unit; NaN where a value is NaN.
    Source: docs/formulas.md, F-108.
    """
    members, observed = _members(members, observed, 1)
    return _distance(members, observed) - _pair_sum(members) / members.shape[-1] ** 2


def crps_ensemble_fair(members: ArrayLike, observed: ArrayLike) -> FloatArray:
    """As `crps_ensemble`, pair term over 2 M (M - 1), M ≥ 2: unbiased for what members are drawn from. Source: F-108."""
    members, observed = _members(members, observed, 2)
    count = members.shape[-1]
    return _distance(members, observed) - _pair_sum(members) / (count * (count - 1))


def _distance(members: FloatArray, observed: FloatArray) -> FloatArray:
    return np.abs(members - observed[..., None]).mean(axis=-1)


def _pair_sum(members: FloatArray) -> FloatArray:
    """Σ over i < j of |x_i - x_j|, from the sorted members."""
    ordered = np.sort(members, axis=-1)
    count = members.shape[-1]
    return ordered @ (2.0 * np.arange(count) - count + 1.0)


def _members(members: ArrayLike, observed: ArrayLike, fewest: int) -> tuple[FloatArray, FloatArray]:
    members, observed = np.asarray(members, np.float64), np.asarray(observed, np.float64)
    if members.ndim < 1 or members.shape[-1] < fewest or np.broadcast_shapes(members.shape[:-1], observed.shape) is None:
        raise ValueError(f"members has shape {members.shape}; the last axis must hold at least {fewest}.")
    return members, observed
