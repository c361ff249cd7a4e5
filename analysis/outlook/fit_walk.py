"""A random walk with drift, fitted to an uneven record of a level."""

from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from analysis.outlook.binomial import LEVEL
from analysis.quantities import FloatArray


@dataclass(frozen=True, slots=True, kw_only=True)
class WalkFit:
    """Level x with dx = drift dt + spread dW.

    Attributes:
        drift_per_s, drift_error: Unit of the level per s, with its standard error.
        spread, spread_error: Standard deviation gained in √1 s, unit/√s, with its standard error.
        spread_low, spread_high: Its interval at 95 %.
        reading_noise: Standard deviation of one reading that the steps betray (0: none seen); ``spread`` is without it.
        log_likelihood: Of the walk without reading noise, for comparison with other models of the same record.
        steps: Steps that it rests on. span_s: Time from the first to the last reading, s.
    """

    drift_per_s: float
    drift_error: float
    spread: float
    spread_error: float
    spread_low: float
    spread_high: float
    reading_noise: float
    log_likelihood: float
    steps: int
    span_s: float


def fit_walk(at_s: FloatArray, level: FloatArray, *, with_noise: bool = False) -> WalkFit:
    """Maximum-likelihood drift and spread of a random walk.

    Args:
        at_s: Times, s, shape (N,), rising. level: Any unit, shape (N,). Rows with NaN are left out; the step across a gap
            counts with its true time (a walk goes on while nobody looks).
        with_noise: Take off white reading noise: neighbouring steps then share a reading with opposite sign, which their
            covariance shows. Assumes nearly even steps.
    Returns:
        `WalkFit`. Without noise: drift ± spread/√T; spread² is that of n - 1 degrees of freedom.
    Raises:
        ValueError: Fewer than 3 finite readings, or times do not rise.
    Source: docs/formulas.md, F-100.
    """
    at_s, level = finite_record(at_s, level, 3)
    gap_s, step = np.diff(at_s), np.diff(level)
    count, span_s = len(step), float(at_s[-1] - at_s[0])
    drift = float(step.sum()) / span_s
    left = step - drift * gap_s
    variance = float(np.sum(left**2 / gap_s)) / (count - 1)
    noise = 0.0
    if with_noise and count > 3:
        noise = float(np.sqrt(max(-np.mean(left[1:] * left[:-1]), 0.0)))
        variance = max(variance - 2.0 * noise**2 * float(np.mean(1.0 / gap_s)), 0.0)
    spread = float(np.sqrt(variance))
    likely = float(np.sum(left**2 / gap_s)) / count
    log_likelihood = -0.5 * float(np.sum(np.log(2.0 * np.pi * gap_s * likely) + 1.0)) if likely > 0.0 else np.inf
    each = 0.5 - 0.5 * LEVEL
    low, high = (spread * float(np.sqrt((count - 1) / chi2.isf(tail, count - 1))) for tail in (each, 1.0 - each))
    return WalkFit(drift_per_s=drift, drift_error=float(np.sqrt(variance / span_s + 2.0 * noise**2 / span_s**2)), spread=spread,
                   spread_error=spread / float(np.sqrt(2.0 * (count - 1))), spread_low=low, spread_high=high, reading_noise=noise,
                   log_likelihood=float(log_likelihood), steps=count, span_s=span_s)


def finite_record(at_s: FloatArray, level: FloatArray, fewest: int) -> tuple[FloatArray, FloatArray]:
    """Readings that are finite, checked for rising times."""
    at_s, level = np.asarray(at_s, np.float64), np.asarray(level, np.float64)
    if at_s.ndim != 1 or at_s.shape != level.shape:
        raise ValueError(f"at_s has shape {at_s.shape}, level {level.shape}; pass one level per time.")
    is_finite = np.isfinite(at_s) & np.isfinite(level)
    at_s, level = at_s[is_finite], level[is_finite]
    if len(at_s) < fewest or not np.all(np.diff(at_s) > 0.0):
        raise ValueError(f"{len(at_s)} finite readings, or times that do not rise; at least {fewest} rising ones are needed.")
    return at_s, level
