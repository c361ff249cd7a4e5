"""Time to the limit from the drift of the last hours, for many moments at once: what warns ahead, live and in replay.

A window of equal bins of the angle in degrees ends at each moment. Its steps either turn back to a mean (where they refute a
walk at 5 %), or walk with a drift that is known to within its error, shrunk by what the error alone would make of it. Cheaper
than `time_to_limit` by a factor of some hundreds, so that a month of moments is judged at once; the two are held against each
other in the tests.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import erfcx

from analysis.outlook.uncertain_drift import uncertain_passage_quantile_s
from analysis.quantities import BoolArray, FloatArray

BINS = 36
"""Bins of a window."""
FEWEST = 24
"""Known bins that a window needs; its last must be among them."""
CRITICAL_T = -3.0
"""Dickey–Fuller τ_μ at 5 % for 25 readings (-2.93 for 50): a walk is refuted below it. F-131."""
FEWEST_SD = 1.5
"""A mean nearer to the limit than this (in its own standard deviations) gives no safety: the level is taken to walk."""
FASTEST = 0.05
"""Share of a displacement that is left after a bin, at the least: white scatter is taken as this."""
MEDIAN, TENTH = 0.5, 0.1


@dataclass(frozen=True, slots=True)
class RecentDrift:
    """For M moments, shape (M,), the end of one bin each.

    Attributes:
        is_known: Enough bins, and the last of them. The rest is NaN (False) where it is not.
        angle_deg: Of the last bin.
        median_s, tenth_s: By then half, and one in ten, of the futures have reached the limit, s from the bin's end; inf: later
            than the window is long; 0 where the angle is beyond the limit.
        turns_back: The steps refute a walk, and the mean is well inside.
    """

    is_known: BoolArray
    angle_deg: FloatArray
    median_s: FloatArray
    tenth_s: FloatArray
    turns_back: BoolArray


def recent_drift(angle_deg: FloatArray, bin_s: float, limit_deg: ArrayLike) -> RecentDrift:
    """What each bin of a record says, with the `BINS` - 1 before it.

    Args:
        angle_deg: Mean angle of each bin, degrees, shape (M,), NaN in gaps; equal bins of ``bin_s`` s.
        limit_deg: The limit, degrees, one or one per bin; NaN: none.
    Returns:
        `RecentDrift`. A gap counts with its true time in the drift; its step is left out of the scatter.
    Raises:
        ValueError: The bin is not above 0 s, or shapes differ.
    Source: docs/formulas.md, F-130 to F-133.
    """
    angle_deg = np.asarray(angle_deg, np.float64)
    limit_deg = np.broadcast_to(np.asarray(limit_deg, np.float64), angle_deg.shape) if angle_deg.ndim == 1 else angle_deg
    if angle_deg.ndim != 1 or not bin_s > 0.0:
        raise ValueError(f"angle_deg has shape {angle_deg.shape}, bin_s={bin_s!r} s; pass one angle a bin of more than 0 s.")
    if not len(angle_deg):
        nothing, never = np.zeros(0), np.zeros(0, dtype=bool)
        return RecentDrift(never, nothing, nothing, nothing, never)
    windows = np.lib.stride_tricks.sliding_window_view(np.concatenate([np.full(BINS - 1, np.nan), angle_deg]), BINS)
    is_there = np.isfinite(windows)
    is_known = (is_there.sum(axis=1) >= FEWEST) & is_there[:, -1] & np.isfinite(limit_deg)
    median_s, tenth_s = np.full((2, len(angle_deg)), np.nan)
    turns_back = np.zeros(len(angle_deg), dtype=bool)
    if is_known.any():
        median_s[is_known], tenth_s[is_known], turns_back[is_known] = _outlooks(
            windows[is_known], is_there[is_known], bin_s, limit_deg[is_known])
    return RecentDrift(is_known, np.where(is_known, angle_deg, np.nan), median_s, tenth_s, turns_back)


def _outlooks(
    windows: FloatArray, is_there: BoolArray, bin_s: float, limit_deg: FloatArray
) -> tuple[FloatArray, FloatArray, BoolArray]:
    last = windows[:, -1]
    steps = windows[:, 1:] - windows[:, :-1]
    is_step = np.isfinite(steps)
    steps, before = np.where(is_step, steps, 0.0), np.where(is_step, windows[:, :-1], 0.0)
    count = is_step.sum(axis=1)
    first = np.argmax(is_there, axis=1)
    span_s = (BINS - 1 - first) * bin_s
    drift = (last - windows[np.arange(len(windows)), first]) / span_s
    left2 = ((steps - drift[:, None] * bin_s) ** 2 * is_step).sum(axis=1)
    spread = np.sqrt(np.maximum(left2 / (bin_s * np.maximum(count - 1, 1)), 1e-10 / bin_s))
    distance, window_s = limit_deg - last, BINS * bin_s
    drift_error = spread / np.sqrt(span_s)
    kept = np.maximum(1.0 - (drift_error / np.where(drift == 0.0, np.inf, drift)) ** 2, 0.0)
    drift, drift_error = drift * kept, drift_error * np.sqrt(kept)
    median_s, tenth_s = (uncertain_passage_quantile_s(distance, drift, drift_error, spread, share, window_s)
                         for share in (MEDIAN, TENTH))
    reverting = _reverting(steps, before, count, bin_s)
    with np.errstate(invalid="ignore", divide="ignore"):
        turns_back = reverting.is_refuted & ((limit_deg - reverting.mean) / reverting.sd >= FEWEST_SD) & (distance > 0.0)
    mean_s = _mean_passage_s(last[turns_back], limit_deg[turns_back], reverting.take(turns_back))
    for found, share in ((median_s, MEDIAN), (tenth_s, TENTH)):
        turned_s = -np.log1p(-share) * mean_s
        found[turns_back] = np.where(turned_s > window_s, np.inf, turned_s)
    # A mean stands for the middle of its bin; times count from the bin's end.
    median_s, tenth_s = (np.where(distance > 0.0, np.maximum(found - 0.5 * bin_s, 1.0), 0.0) for found in (median_s, tenth_s))
    return median_s, tenth_s, turns_back


@dataclass(frozen=True, slots=True)
class _Reverting:
    """First-order autoregression of each window: a level that turns back to a mean."""

    is_refuted: BoolArray
    mean: FloatArray
    sd: FloatArray
    rate_per_s: FloatArray

    def take(self, index: BoolArray) -> "_Reverting":
        return _Reverting(self.is_refuted[index], self.mean[index], self.sd[index], self.rate_per_s[index])


def _reverting(steps: FloatArray, before: FloatArray, count: FloatArray, bin_s: float) -> _Reverting:
    """Least squares of step on level; its t-value is the Dickey–Fuller statistic with a constant."""
    with np.errstate(invalid="ignore", divide="ignore"):
        mean_before, mean_step = before.sum(axis=1) / count, steps.sum(axis=1) / count
        sxx = (before**2).sum(axis=1) - count * mean_before**2
        sxd = (before * steps).sum(axis=1) - count * mean_before * mean_step
        sdd = (steps**2).sum(axis=1) - count * mean_step**2
        slope = sxd / sxx
        noise2 = np.maximum(sdd - slope * sxd, 0.0) / (count - 2)
        is_refuted = slope / np.sqrt(noise2 / sxx) < CRITICAL_T
        kept = np.clip(1.0 + slope, FASTEST, 1.0 - 1e-6)
        sd = np.sqrt(noise2 / (1.0 - kept**2))
        return _Reverting(is_refuted & (sd > 0.0), mean_before - mean_step / slope, sd, -np.log(kept) / bin_s)


def _mean_passage_s(last: FloatArray, limit: FloatArray, fit: _Reverting) -> FloatArray:
    """Mean time of a mean-reverting level up to a limit well above its mean, s; the law is then nearly exponential. F-132."""
    grid, integral = _passage_integral()
    ends = [np.interp(np.clip((level - fit.mean) / (np.sqrt(2.0) * fit.sd), grid[0], grid[-1]), grid, integral)
            for level in (limit, last)]
    return np.sqrt(np.pi) / fit.rate_per_s * np.maximum(np.exp(ends[0]) - np.exp(ends[1]), 0.0)


@lru_cache(maxsize=1)
def _passage_integral() -> tuple[FloatArray, FloatArray]:
    """ln of the integral of erfcx(-u) from far below, on a grid of u."""
    grid = np.linspace(-12.0, 18.0, 30_001)
    values = erfcx(-grid)
    total = np.concatenate([[0.0], np.cumsum(0.5 * (values[1:] + values[:-1]) * np.diff(grid))])
    return grid, np.log(total + 1e-3)
