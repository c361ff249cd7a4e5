"""Does a level wander off or turn back? A test that says how strong the evidence is."""

from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from analysis.outlook.fit_reverting import RevertingFit, fit_reverting
from analysis.outlook.fit_walk import WalkFit, fit_walk
from analysis.quantities import FloatArray

CRITICAL_RATIO = {0.10: 6.6, 0.05: 8.2, 0.01: 11.8}
"""Squares of the Dickey–Fuller τ_μ quantiles -2.57, -2.86, -3.43: what the likelihood ratio passes by chance on a walk."""
FEWEST_STEPS = 30


class DriftModel(StrEnum):
    """How a level is taken to move."""

    WALK = "random walk with drift"
    REVERTING = "turns back to a mean"


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelChoice:
    """The model taken, and why.

    Attributes:
        model: *Turns back* only where the data refute a walk at 5 %; else the walk, which reaches limits sooner.
        likelihood_ratio: 2 ln(L reverting / L walk), ≥ 0 but for rounding.
        chance_level: Smallest of 0.01, 0.05, 0.10 at which a walk is refuted; 1: not even at 0.10.
        walk, reverting: Both fits; ``reverting`` is None below 30 steps, where the choice is always the walk.
    """

    model: DriftModel
    likelihood_ratio: float
    chance_level: float
    walk: WalkFit
    reverting: RevertingFit | None


def choose_model(at_s: FloatArray, level: FloatArray) -> ModelChoice:
    """Fit both models to one record and choose.

    Args:
        at_s, level: As of `fit_walk.fit_walk`.
    Returns:
        `ModelChoice`. The ordinary χ² table does not hold here: on a walk the ratio follows the square of the Dickey–Fuller
        statistic, and so do the critical values.
    Source: docs/formulas.md, F-102.
    """
    walk = fit_walk(at_s, level)
    if walk.steps < FEWEST_STEPS or walk.spread == 0.0:
        return ModelChoice(model=DriftModel.WALK, likelihood_ratio=0.0, chance_level=1.0, walk=walk, reverting=None)
    reverting = fit_reverting(at_s, level)
    ratio = 2.0 * (reverting.log_likelihood - walk.log_likelihood)
    level_met = min((chance for chance, critical in CRITICAL_RATIO.items() if ratio > critical), default=1.0)
    is_reverting = level_met <= 0.05 and np.isfinite([reverting.rate_log_error, reverting.mean_error]).all()
    return ModelChoice(model=DriftModel.REVERTING if is_reverting else DriftModel.WALK, likelihood_ratio=ratio,
                       chance_level=level_met, walk=walk, reverting=reverting)
