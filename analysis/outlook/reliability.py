"""What was said beside what came out, with counts."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.stats import binom

from analysis.outlook.binomial import LEVEL, proportion_interval
from analysis.outlook.brier import forecasts_and_outcomes

INNER_EDGES = (0.2, 0.4, 0.6, 0.8, 0.9, 0.97)


@dataclass(frozen=True, slots=True, kw_only=True)
class ReliabilityRow:
    """One line of the table.

    Attributes:
        said: Mean of the stated chances of the row. came_out: Share that came true. count: Cases; came_true: of these true.
        low, high: 95 % Clopper–Pearson interval of the share behind ``came_out``.
        band_low, band_high: Central 95 % of shares that chance alone gives if each case had the chance ``said``.
    """

    said: float
    came_out: float
    count: int
    came_true: int
    low: float
    high: float
    band_low: float
    band_high: float

    @property
    def is_as_said(self) -> bool:
        """The share lies in the band that chance alone explains."""
        return self.band_low <= self.came_out <= self.band_high


def reliability_by_value(forecast: ArrayLike, outcome: ArrayLike, *, level: float = LEVEL) -> tuple[ReliabilityRow, ...]:
    """One row for each distinct forecast, rising; arguments as `brier.brier_parts`. Source: docs/formulas.md, F-106."""
    forecast, outcome = forecasts_and_outcomes(forecast, outcome)
    values, group = np.unique(forecast, return_inverse=True)
    return tuple(_row(forecast[group == number], outcome[group == number], level) for number in range(len(values)))


def reliability_table(forecast: ArrayLike, outcome: ArrayLike, inner_edges: ArrayLike = INNER_EDGES, *,
                      level: float = LEVEL) -> tuple[ReliabilityRow, ...]:
    """One row for each bin that holds a case; edges as of `brier.brier_parts_binned`. Source: docs/formulas.md, F-106."""
    forecast, outcome = forecasts_and_outcomes(forecast, outcome)
    group = np.searchsorted(np.asarray(inner_edges, np.float64), forecast, side="right")
    return tuple(_row(forecast[group == number], outcome[group == number], level) for number in np.unique(group))


def _row(forecast: np.ndarray, outcome: np.ndarray, level: float) -> ReliabilityRow:
    count, came_true, said = len(forecast), int(outcome.sum()), float(forecast.mean())
    low, high = proportion_interval(came_true, count, level=level)
    band = binom.ppf([0.5 - 0.5 * level, 0.5 + 0.5 * level], count, said) / count
    return ReliabilityRow(said=said, came_out=came_true / count, count=count, came_true=came_true, low=float(low),
                          high=float(high), band_low=float(max(band[0], 0.0)), band_high=float(band[1]))
