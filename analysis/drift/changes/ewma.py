"""Exponentially weighted moving average and its limits."""

import numpy as np
from scipy import signal

from analysis.quantities import BoolArray, FloatArray


def ewma(level: FloatArray, weight: float, start: float) -> FloatArray:
    """z_i = λ x_i + (1 - λ) z_{i-1} from z₀ = start (not among the values returned).

    Args:
        level: Readings in order, shape (N,); NaN leaves the average as it is.
        weight: λ, in (0, 1]. ``start``: level in control.
    Returns:
        Shape (N,), unit of the level. Source: docs/formulas.md, F-85.
    """
    _check(weight)
    level = np.asarray(level, np.float64)
    known = np.isfinite(level)
    average = np.full(len(level), start, dtype=np.float64)
    if known.any():
        part = signal.lfilter([weight], [1.0, weight - 1.0], level[known] - start)
        filled = np.concatenate([[0.0], part])
        average = start + filled[np.cumsum(known)]
    return average


def ewma_limit(count: int, sd: float, weight: float, reach: float) -> FloatArray:
    """Distance of the limits from the start after 1 … ``count`` readings, shape (count,), unit of ``sd``.

    L σ √(λ/(2 - λ) [1 - (1 - λ)^{2i}]); its last values are the steady-state limit. Independent readings. Source: F-85.
    """
    _check(weight)
    grown = 1.0 - (1.0 - weight) ** (2.0 * np.arange(1, count + 1))
    return reach * sd * np.sqrt(weight / (2.0 - weight) * grown)


def ewma_signals(level: FloatArray, start: float, sd: float, weight: float, reach: float) -> BoolArray:
    """Where the average lies beyond its limits, shape (N,); NaN readings count towards neither. Source: F-85."""
    average = ewma(level, weight, start)
    seen = np.cumsum(np.isfinite(level))
    limit = np.concatenate([[np.inf], ewma_limit(len(average), sd, weight, reach)])[seen]
    return np.abs(average - start) > limit


def _check(weight: float) -> None:
    if not 0.0 < weight <= 1.0:
        raise ValueError(f"weight={weight!r} must lie in (0, 1]; 0.1 to 0.3 is usual.")
