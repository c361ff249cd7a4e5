"""Tabular CUSUM on both sides of a target."""

from dataclasses import dataclass

import numpy as np

from analysis.quantities import FloatArray


@dataclass(frozen=True, slots=True)
class Cusum:
    """Both sums, shape (N,), at least 0, in the unit of the level; they are not reset after a signal."""

    high: FloatArray
    low: FloatArray

    def signals(self, limit: float) -> tuple[FloatArray, FloatArray]:
        """Where the high and the low sum pass ``limit`` (H, above 0; strictly above counts), shapes (N,)."""
        if not limit > 0.0:
            raise ValueError(f"limit={limit!r} must be above 0; use h times the standard deviation.")
        return self.high > limit, self.low > limit


def tabular_cusum(level: FloatArray, target: float, slack: float) -> Cusum:
    """Sums of what goes beyond target ± slack.

    Args:
        level: Readings in order, shape (N,); NaN leaves both sums as they are.
        target: Level in control. ``slack``: K, at least 0, same unit; half of the shift to be found.
    Returns:
        S⁺ = max(0, S⁺ + x - target - K) and S⁻ = max(0, S⁻ + target - K - x), both from 0. For run lengths of
        independent readings see `run_length`; autocorrelated ones signal far sooner.
    Source: docs/formulas.md, F-83.
    """
    if not slack >= 0.0:
        raise ValueError(f"slack={slack!r} must be at least 0; half of the shift to be found is usual.")
    departure = np.asarray(level, np.float64) - target
    known = np.isfinite(departure)
    return Cusum(above_least(np.where(known, departure - slack, 0.0)), above_least(np.where(known, -departure - slack, 0.0)))


def above_least(step: FloatArray) -> FloatArray:
    """max(0, S + step) from 0, shape of ``step``: the running sum above the least it has been. Source: docs/formulas.md, F-83."""
    total = np.cumsum(step)
    return total - np.minimum.accumulate(np.minimum(total, 0.0))
