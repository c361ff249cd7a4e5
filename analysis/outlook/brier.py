"""Scores of forecasts that were given as a chance and came true or not."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from analysis.quantities import FloatArray, IntArray


@dataclass(frozen=True, slots=True)
class BrierParts:
    """Brier score and its parts, all dimensionless.

    Attributes:
        score: Mean (f - o)², 0 best, 1 worst. standard_error: Of that mean, cases taken as independent; NaN below 2 cases.
        reliability: How far what was said is from what came out (0 best). resolution: How far groups differ from the base rate.
        uncertainty: ō(1 - ō) of the base rate ō. within: What binning leaves over; 0 for groups of one forecast value.
        skill: 1 - score/uncertainty: 0 for always quoting the base rate; NaN where all cases came out alike.
    """

    score: float
    standard_error: float
    reliability: float
    resolution: float
    uncertainty: float
    within: float
    skill: float


def brier_score(forecast: ArrayLike, outcome: ArrayLike) -> float:
    """Mean squared difference (half of Brier's own sum over two classes); NaN for no case. Source: F-104."""
    forecast, outcome = forecasts_and_outcomes(forecast, outcome)
    return float(np.mean((forecast - outcome) ** 2)) if len(forecast) else float("nan")


def brier_parts(forecast: ArrayLike, outcome: ArrayLike) -> BrierParts:
    """Murphy's decomposition by distinct forecast values: score = reliability - resolution + uncertainty.

    Args:
        forecast: Chances that were stated, in [0, 1], shape (N,). outcome: What came out, False or True, shape (N,).
    Returns:
        `BrierParts`; all NaN for N = 0.
    Raises:
        ValueError: Shapes differ, a chance is NaN or outside [0, 1], an outcome is neither 0 nor 1.
    Source: docs/formulas.md, F-104.
    """
    forecast, outcome = forecasts_and_outcomes(forecast, outcome)
    return _parts(forecast, outcome, np.unique(forecast, return_inverse=True)[1])


def brier_parts_binned(forecast: ArrayLike, outcome: ArrayLike, inner_edges: ArrayLike) -> BrierParts:
    """The decomposition by bins: score = reliability - resolution + uncertainty + within.

    Args:
        forecast, outcome: As of `brier_parts`.
        inner_edges: Rising bin edges inside (0, 1), shape (B - 1,); a forecast on an edge belongs to the upper bin.
    Returns:
        `BrierParts`; ``within`` = variance of the forecasts inside their bins - 2 × their covariance with the outcomes.
    Source: docs/formulas.md, F-105.
    """
    forecast, outcome = forecasts_and_outcomes(forecast, outcome)
    return _parts(forecast, outcome, np.searchsorted(np.asarray(inner_edges, np.float64), forecast, side="right"))


def forecasts_and_outcomes(forecast: ArrayLike, outcome: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Checked pairs of stated chances and outcomes (0 or 1)."""
    forecast, outcome = np.asarray(forecast, np.float64), np.asarray(outcome, np.float64)
    if forecast.ndim != 1 or forecast.shape != outcome.shape:
        raise ValueError(f"forecast has shape {forecast.shape}, outcome {outcome.shape}; pass one of each per case.")
    if not (np.all((forecast >= 0.0) & (forecast <= 1.0)) and np.all((outcome == 0.0) | (outcome == 1.0))):
        raise ValueError("forecasts must lie in [0, 1] and outcomes be 0 or 1; leave out cases that were not forecast.")
    return forecast, outcome


def _parts(forecast: FloatArray, outcome: FloatArray, group: IntArray) -> BrierParts:
    count = len(forecast)
    if not count:
        return BrierParts(*[float("nan")] * 7)
    size = np.maximum(np.bincount(group), 1)
    said, came_out = (np.bincount(group, values) / size for values in (forecast, outcome))
    each = (forecast - outcome) ** 2
    base = outcome.mean()
    reliability = np.mean((said - came_out)[group] ** 2)
    resolution = np.mean((came_out - base)[group] ** 2)
    uncertainty = base * (1.0 - base)
    apart = forecast - said[group]
    within = np.mean(apart**2) - 2.0 * np.mean(apart * (outcome - came_out[group]))
    error = each.std(ddof=1) / np.sqrt(count) if count > 1 else float("nan")
    skill = 1.0 - each.mean() / uncertainty if uncertainty > 0.0 else float("nan")
    return BrierParts(*map(float, (each.mean(), error, reliability, resolution, uncertainty, within, skill)))
