"""A mean-reverting (Ornstein–Uhlenbeck) process, fitted to an uneven record of a level."""

from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize_scalar

from analysis.outlook.fit_walk import finite_record
from analysis.quantities import FloatArray

TRIALS = 80


@dataclass(frozen=True, slots=True, kw_only=True)
class RevertingFit:
    """Level x with dx = -rate (x - mean) dt + σ dW; ``sd`` = σ/√(2 rate) is what it settles to.

    Attributes:
        rate_per_s, mean, sd: 1/s and twice the level's unit.
        rate_log_error: Standard error of ln(rate), dimensionless: a rate is known by a factor.
        mean_error, sd_error: Standard errors, unit of the level;
            all NaN where the likelihood has no peak (a record that does not turn back).
        log_likelihood: At the peak. steps: Steps that it rests on.
    """

    rate_per_s: float
    mean: float
    sd: float
    rate_log_error: float
    mean_error: float
    sd_error: float
    log_likelihood: float
    steps: int


def fit_reverting(at_s: FloatArray, level: FloatArray) -> RevertingFit:
    """Maximum likelihood from the exact step law, given the first reading.

    Args:
        at_s: Times, s, shape (N,), rising, any spacing. level: Any unit, shape (N,). Rows with NaN are left out; a gap counts
            with its true time.
    Returns:
        `RevertingFit`; rates are sought from 1/100 of the record's length to 10 of its shortest steps. Short records make the
        rate too high (bias about 4/T); errors are those of the curvature. White reading noise is not modelled: feed
        averages over the time at which the Allan deviation is lowest.
    Raises:
        ValueError: Fewer than 5 finite readings, or times do not rise.
    Source: docs/formulas.md, F-101.
    """
    at_s, level = finite_record(at_s, level, 5)
    gap_s = np.diff(at_s)
    low, high = np.log(0.01 / (at_s[-1] - at_s[0])), np.log(10.0 / gap_s.min())
    trials = np.linspace(low, high, TRIALS)
    best = int(np.argmin([_cost(trial, gap_s, level) for trial in trials]))
    bounds = (trials[max(best - 1, 0)], trials[min(best + 1, TRIALS - 1)])
    log_rate = float(minimize_scalar(_cost, bounds=bounds, args=(gap_s, level), method="bounded", options={"xatol": 1e-10}).x)
    cost, mean, sd = _profile(log_rate, gap_s, level)
    errors = _errors(np.array([log_rate, mean, np.log(sd)]), gap_s, level) if sd > 0.0 else np.full(3, np.nan)
    return RevertingFit(rate_per_s=float(np.exp(log_rate)), mean=mean, sd=sd, rate_log_error=float(errors[0]),
                        mean_error=float(errors[1]), sd_error=float(sd * errors[2]), log_likelihood=-cost, steps=len(gap_s))


def _cost(log_rate: float, gap_s: FloatArray, level: FloatArray) -> float:
    return _profile(log_rate, gap_s, level)[0]


def _profile(log_rate: float, gap_s: FloatArray, level: FloatArray) -> tuple[float, float, float]:
    """Least negative log-likelihood for a rate, with the mean and the sd that give it."""
    kept, lost, share = _step_law(log_rate, gap_s)
    moved = level[1:] - kept * level[:-1]
    mean = float(np.sum(lost * moved / share) / np.sum(lost**2 / share))
    variance = float(np.mean((moved - lost * mean) ** 2 / share))
    if variance <= 0.0:
        return -np.inf, mean, 0.0
    return 0.5 * float(np.sum(np.log(2.0 * np.pi * variance * share)) + len(gap_s)), mean, float(np.sqrt(variance))


def _step_law(log_rate: float, gap_s: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """exp(-θ dt), 1 - exp(-θ dt) and 1 - exp(-2 θ dt), exact for small steps too."""
    turned = np.exp(log_rate) * gap_s
    return np.exp(-turned), -np.expm1(-turned), -np.expm1(-2.0 * turned)


def _errors(peak: FloatArray, gap_s: FloatArray, level: FloatArray) -> FloatArray:
    """Standard errors of (ln rate, mean, ln sd) from the curvature at the peak; NaN where it is not a peak."""
    step = np.diag([1e-3, 1e-3 * np.exp(peak[2]), 1e-3])

    def cost(point: FloatArray) -> float:
        kept, lost, share = _step_law(point[0], gap_s)
        left = level[1:] - kept * level[:-1] - lost * point[1]
        return 0.5 * float(np.sum(np.log(share) + left**2 / (share * np.exp(2.0 * point[2])))) + len(gap_s) * float(point[2])

    curvature = np.array([[(cost(peak + one + two) - cost(peak + one - two) - cost(peak - one + two) + cost(peak - one - two))
                           / (4.0 * one.sum() * two.sum()) for two in step] for one in step])
    if not np.all(np.isfinite(curvature)) or np.linalg.eigvalsh(curvature).min() <= 0.0:
        return np.full(3, np.nan)
    return np.sqrt(np.diag(np.linalg.inv(curvature)))
