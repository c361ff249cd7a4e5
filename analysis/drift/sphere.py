"""Directions on the Poincaré sphere: mean, concentration and spread, from sums that merge.

All angles are angles on the sphere (twice the physical ones). Rows with a NaN are left out and not counted.
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.optimize import brentq
from scipy.stats import chi2

from analysis.quantities import FloatArray

_LEAST_FOR_CONE: Final = 25  # below, the large-sample cone is not offered


@dataclass(frozen=True, slots=True)
class DirectionSums:
    """What is kept of N unit vectors; sums of parts add up to the sums of the whole (F-18).

    Attributes:
        count: N.
        total: Sum of the vectors, shape (3,).
        outer: Sum of their outer products, shape (3, 3); its trace is N.
    """

    count: int
    total: FloatArray
    outer: FloatArray

    def __add__(self, other: "DirectionSums") -> "DirectionSums":
        return DirectionSums(self.count + other.count, self.total + other.total, self.outer + other.outer)


@dataclass(frozen=True, slots=True, kw_only=True)
class MeanDirection:
    """Mean direction and concentration of N directions.

    Attributes:
        count: N.
        direction: Unit vector, shape (3,); NaN where the sum is 0.
        resultant: R, length of the sum, 0 to N. ``mean_resultant``: R/N.
        concentration: k = (N - 1)/(N - R), Fisher's unbiased estimate; inf for equal directions, NaN below N = 2.
        concentration_low, concentration_high: Interval of the true concentration at ``level``.
        concentration_ml: Root of coth k - 1/k = R/N; larger by about N/(N - 1) for tight directions.
        cone_rad: Half angle of the cone that holds the true mean at ``level``, Fisher's distribution assumed; pi where
            no direction can be ruled out.
        circular_error: Circular standard error of the mean direction, rad, no distribution assumed.
        free_cone_rad: Cone at ``level`` from ``circular_error``; NaN below N = 25 and where it does not exist.
        level: Of the intervals and cones.
    """

    count: int
    direction: FloatArray
    resultant: float
    mean_resultant: float
    concentration: float
    concentration_low: float
    concentration_high: float
    concentration_ml: float
    cone_rad: float
    circular_error: float
    free_cone_rad: float
    level: float


@dataclass(frozen=True, slots=True)
class Spread:
    """Spread of directions about their mean.

    Attributes:
        eigenvalues: Of the scatter matrix (mean outer product), rising, sum 1, shape (3,). One large, two small and
            equal: a round cloud; middle one well above the least: an arc; two large: a circle.
        eigenvectors: Columns belonging to them, shape (3, 3).
        tangent_rad2: Mean squares of the two components across the mean direction, rad² (chords), rising, shape (2,).
        tangent_axes: Their directions on the sphere, rows, shape (2, 3).
    """

    eigenvalues: FloatArray
    eigenvectors: FloatArray
    tangent_rad2: FloatArray
    tangent_axes: FloatArray


def direction_sums(sop: FloatArray) -> DirectionSums:
    """Sums of unit Stokes vectors, shape (N, 3). Source: docs/formulas.md, F-45.

    Raises:
        ValueError: The shape is not (N, 3).
    """
    sop = np.asarray(sop, dtype=np.float64)
    if sop.ndim != 2 or sop.shape[1] != 3:
        raise ValueError(f"sop has shape {sop.shape}; pass unit Stokes vectors of shape (N, 3).")
    outer = sop.T @ sop
    if not np.isfinite(outer).all():
        sop = sop[np.isfinite(sop).all(axis=1)]
        outer = sop.T @ sop
    return DirectionSums(len(sop), np.ones(len(sop)) @ sop, outer)


def mean_direction(sums: DirectionSums, level: float = 0.95) -> MeanDirection:
    """Mean direction, resultant, Fisher concentration with interval, and cones of confidence.

    The intervals take the N directions as independent: readings of a drifting state are not, so give means over times
    longer than the drift's memory, or take the intervals as too narrow. Source: docs/formulas.md, F-45 to F-47.

    Raises:
        ValueError: ``level`` is not between 0 and 1.
    """
    if not 0.0 < level < 1.0:
        raise ValueError(f"level={level!r} must lie between 0 and 1; 0.95 is usual.")
    count, resultant = sums.count, float(np.linalg.norm(sums.total))
    nothing = not (count and resultant > 0.0)
    direction = np.full(3, np.nan) if nothing else sums.total / resultant
    lack = max(count - resultant, 0.0)
    low, high = _concentration_interval(count, lack, level)
    mean_resultant = resultant / count if count else math.nan
    error = _circular_error(sums, direction, mean_resultant)
    return MeanDirection(
        count=count, direction=direction, resultant=resultant, mean_resultant=mean_resultant,
        concentration=math.nan if count < 2 else _ratio(count - 1, lack),
        concentration_low=low, concentration_high=high,
        concentration_ml=fisher_concentration(mean_resultant) if count else math.nan,
        cone_rad=_cone_rad(count, resultant, level), circular_error=error,
        free_cone_rad=_free_cone_rad(count, error, level), level=level,
    )  # fmt: skip


def fisher_concentration(mean_resultant: float) -> float:
    """Root k of coth k - 1/k = R/N: the most likely concentration; inf at 1, 0 at 0. Source: docs/formulas.md, F-46."""
    if not 0.0 <= mean_resultant <= 1.0 + 1e-12:
        raise ValueError(f"mean_resultant={mean_resultant!r} must lie within 0 and 1.")
    lack = 1.0 - mean_resultant
    if lack < 1e-3:  # coth k is 1 here to all digits, so 1/k = 1 - R/N
        return _ratio(1.0, max(lack, 0.0))
    if mean_resultant < 1e-6:
        return 3.0 * mean_resultant
    return float(brentq(lambda k: 1.0 / math.tanh(k) - 1.0 / k - mean_resultant, 1e-6, 2.0 / lack, xtol=1e-14, rtol=1e-14))


def fisher_angle_rad(concentration: FloatArray | float, share: float) -> FloatArray:
    """Angle about the mean that holds ``share`` of a Fisher distribution, rad, any shape. Source: docs/formulas.md, F-46."""
    if not 0.0 <= share <= 1.0:
        raise ValueError(f"share={share!r} must lie within 0 and 1.")
    k = np.asarray(concentration, dtype=np.float64)
    haversine = -np.log1p(share * np.expm1(-2.0 * k)) / (2.0 * k)  # (1 - cos)/2, exact for small angles too
    return 2.0 * np.arcsin(np.sqrt(np.clip(haversine, 0.0, 1.0)))


def spread(sums: DirectionSums) -> Spread:
    """Eigenvalues and axes of the scatter matrix, about the origin and across the mean direction; NaN without a direction.

    Source: docs/formulas.md, F-48.
    """
    resultant = float(np.linalg.norm(sums.total))
    if not (sums.count and resultant > 0.0):
        return Spread(np.full(3, np.nan), np.full((3, 3), np.nan), np.full(2, np.nan), np.full((2, 3), np.nan))
    values, vectors = np.linalg.eigh(sums.outer / sums.count)
    basis = tangent_basis(sums.total / resultant)
    across, turns = np.linalg.eigh(basis @ sums.outer @ basis.T / sums.count)
    return Spread(np.clip(values, 0.0, 1.0), vectors, np.maximum(across, 0.0), turns.T @ basis)


def tangent_basis(direction: FloatArray) -> FloatArray:
    """Two unit vectors across ``direction``, shape (2, 3): e1, e2 with e1 × e2 = direction."""
    helper = np.eye(3)[int(np.argmin(np.abs(direction)))]
    first = np.cross(helper, direction)
    first /= np.linalg.norm(first)
    return np.stack([first, np.cross(direction, first)])


def _ratio(above: float, below: float) -> float:
    return above / below if below > 0.0 else math.inf


def _concentration_interval(count: int, lack: float, level: float) -> tuple[float, float]:
    """2 κ (N − R) is nearly chi-squared with 2 (N − 1) degrees of freedom."""
    if count < 2:
        return math.nan, math.nan
    low, high = chi2.ppf([(1.0 - level) / 2.0, (1.0 + level) / 2.0], 2 * (count - 1))
    return _ratio(low, 2.0 * lack), _ratio(high, 2.0 * lack)


def _cone_rad(count: int, resultant: float, level: float) -> float:
    if count < 2 or not resultant > 0.0:
        return math.nan if count < 2 else math.pi
    haversine = max(count - resultant, 0.0) / resultant * math.expm1(-math.log1p(-level) / (count - 1)) / 2.0
    return 2.0 * math.asin(math.sqrt(haversine)) if haversine < 1.0 else math.pi


def _circular_error(sums: DirectionSums, direction: FloatArray, mean_resultant: float) -> float:
    if not sums.count or np.isnan(direction[0]):
        return math.nan
    along = float(direction @ sums.outer @ direction) / sums.count
    return math.sqrt(max(1.0 - along, 0.0) / sums.count) / mean_resultant


def _free_cone_rad(count: int, error: float, level: float) -> float:
    sine = math.sqrt(-math.log1p(-level)) * error
    return math.asin(sine) if count >= _LEAST_FOR_CONE and sine <= 1.0 else math.nan
