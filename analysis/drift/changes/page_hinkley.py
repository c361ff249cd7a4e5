"""Page–Hinkley test: CUSUM against a mean that may be learnt on the way."""

import numpy as np

from analysis.drift.changes.cusum import Cusum, above_least
from analysis.quantities import FloatArray


def page_hinkley(level: FloatArray, tolerance: float, *, reference: float | None = None) -> Cusum:
    """Rise and fall of the level against a reference, less a tolerance.

    Args:
        level: Readings in order, shape (N,); NaN leaves the sums as they are.
        tolerance: δ, at least 0, unit of the level.
        reference: Fixed mean, with which this is the tabular CUSUM; None takes the running mean of the readings so far, the
            current one included. A slow ramp drags a running mean along and may go unseen.
    Returns:
        ``high``: m - min m with m = Σ (x - mean - δ), and ``low`` likewise for falls. Source: docs/formulas.md, F-86.
    """
    if not tolerance >= 0.0:
        raise ValueError(f"tolerance={tolerance!r} must be at least 0.")
    level = np.asarray(level, np.float64)
    known = np.isfinite(level)
    filled = np.where(known, level, 0.0)
    if reference is None:
        mean = np.cumsum(filled) / np.maximum(np.cumsum(known), 1)
    else:
        mean = np.full(len(level), reference)
    departure = np.where(known, filled - mean, 0.0)
    slack = np.where(known, tolerance, 0.0)
    return Cusum(above_least(departure - slack), above_least(-departure - slack))
