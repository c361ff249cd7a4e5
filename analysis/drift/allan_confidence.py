"""How well an Allan deviation is known: equivalent degrees of freedom, interval, slope and kind of noise.

Source: docs/formulas.md, F-53 to F-55.
"""

import math
from dataclasses import dataclass
from enum import StrEnum
from functools import lru_cache
from typing import Final

import numpy as np
from scipy.stats import chi2

from analysis.drift.allan_curve import AllanCurve
from analysis.quantities import FloatArray

_EXACT_UP_TO: Final = 256  # larger factors are scaled down together with the number of terms


class Noise(StrEnum):
    """What a level does at one averaging time, by the slope of its Allan deviation against it on log scales."""

    ANTICORRELATED = "anticorrelated"  # -1: white "phase", such as rounding that evens out
    WHITE = "white"  # -1/2: reading noise
    FLICKER = "flicker"  # 0
    RANDOM_WALK = "random-walk"  # +1/2
    DRIFT = "drift"  # +1: a steady trend, no noise: confidence by chi-squared does not hold
    UNKNOWN = "unknown"  # a single averaging time


_BOUNDS: Final = ((-0.75, Noise.ANTICORRELATED), (-0.25, Noise.WHITE), (0.25, Noise.FLICKER), (0.75, Noise.RANDOM_WALK))
_BOXES: Final = {Noise.ANTICORRELATED: 0, Noise.WHITE: 1, Noise.RANDOM_WALK: 2, Noise.DRIFT: 2}


@dataclass(frozen=True, slots=True)
class AllanConfidence:
    """Confidence of the T points of a scalar's curve, shape (T,).

    Attributes:
        slope: d log(deviation) / d log(tau), from the neighbours; NaN where unknown.
        noise: Kind of noise at each point.
        edf: Equivalent degrees of freedom; NaN without a term.
        low, high: Interval of the true deviation, in its unit.
        level: Of the interval.
    """

    slope: FloatArray
    noise: tuple[Noise, ...]
    edf: FloatArray
    low: FloatArray
    high: FloatArray
    level: float


def confidence_of(curve: AllanCurve, component: int | None = None, level: float = 0.95) -> AllanConfidence:
    """Slope, kind of noise, degrees of freedom and interval of each point of a curve.

    For a curve of C components name the ``component``. The degrees of freedom are those of the noise that the slope
    shows; for flicker, and where the slope is unknown, the fewest of white noise and random walk. Gaps: the terms that
    are there count as if they were in a row (own rule; too few degrees rather than too many when gaps lie far apart).

    Raises:
        ValueError: A curve of several components without ``component``.
    """
    if curve.deviation.ndim == 2 and component is None:
        raise ValueError(f"deviation has shape {curve.deviation.shape}; name the component.")
    deviation = curve.deviation if component is None else curve.deviation[:, component]
    slope = slopes(curve.tau_s, deviation)
    if curve.modified:  # white "phase" falls with -3/2 there; all other slopes agree
        noise = tuple(_noise_of(value if value > -1.0 else -1.0) for value in slope)
    else:
        noise = tuple(_noise_of(value) for value in slope)
    edf = np.array([_edf_of(kind, int(terms), int(m), curve.modified)
                    for kind, terms, m in zip(noise, curve.terms, curve.factors, strict=True)])
    low, high = deviation_interval(deviation, edf, level)
    return AllanConfidence(slope, noise, edf, low, high, level)


def slopes(tau_s: FloatArray, deviation: FloatArray) -> FloatArray:
    """Slope of log deviation against log tau from both neighbours (one at the ends), shape (T,); NaN where unknown."""
    found = np.full(len(deviation), np.nan)
    known = np.flatnonzero((deviation > 0.0) & np.isfinite(deviation))
    if len(known) > 1:
        found[known] = np.gradient(np.log(deviation[known]), np.log(tau_s[known]))
    return found


def deviation_interval(deviation: FloatArray, edf: FloatArray, level: float = 0.95) -> tuple[FloatArray, FloatArray]:
    """Interval of the true deviation: edf s²/σ² is chi-squared with ``edf`` degrees of freedom.

    Args:
        deviation, edf: Any unit; equal shapes.
        level: Between 0 and 1.
    Returns:
        Low and high, in the deviation's unit, NaN where either is NaN. Source: docs/formulas.md, F-54.
    """
    if not 0.0 < level < 1.0:
        raise ValueError(f"level={level!r} must lie between 0 and 1; 0.95 is usual.")
    edf = np.asarray(edf, dtype=np.float64)
    upper, lower = chi2.ppf((1.0 + level) / 2.0, edf), chi2.ppf((1.0 - level) / 2.0, edf)
    return deviation * np.sqrt(edf / upper), deviation * np.sqrt(edf / lower)


def edf(noise: Noise, terms: int, m: int, *, modified: bool = False) -> float:
    """Equivalent degrees of freedom of the mean square of ``terms`` neighbouring Gaussian differences.

    Exact: (tr C)² / tr C², C the covariance of the differences, for m up to 256; above, both numbers are scaled down,
    which changes the result by less than 0.1 %.

    Args:
        noise: Anticorrelated, white or random walk (drift is taken as random walk).
        terms: Overlapping differences, N - 2m + 1 (modified: N - 3m + 2), N readings.
        m: Averaging factor, at least 1.
    Returns:
        At least 1; NaN without a term.
    Raises:
        ValueError: The noise has no finite covariance here (flicker, unknown), or m is below 1.
    Source: docs/formulas.md, F-53.
    """
    if noise not in _BOXES:
        raise ValueError(f"noise={noise!r} has no exact degrees of freedom; use white or random-walk.")
    if m < 1:
        raise ValueError(f"m={m!r} must be at least 1.")
    if terms < 1:
        return math.nan
    if m > _EXACT_UP_TO and _BOXES[noise] + modified:
        terms, m = max(1, round(terms * _EXACT_UP_TO / m)), _EXACT_UP_TO
    share = _covariance(_BOXES[noise], m, modified)
    lag = np.arange(min(terms, len(share)))
    squares = share[: len(lag)] ** 2 * (terms - lag)
    return float(terms**2 / (squares[0] + 2.0 * squares[1:].sum()))


def _noise_of(slope: float) -> Noise:
    if math.isnan(slope):
        return Noise.UNKNOWN
    return next((kind for bound, kind in _BOUNDS if slope < bound), Noise.DRIFT)


def _edf_of(noise: Noise, terms: int, m: int, modified: bool) -> float:
    if noise in _BOXES:
        return edf(noise, terms, m, modified=modified)
    return min(edf(kind, terms, m, modified=modified) for kind in (Noise.WHITE, Noise.RANDOM_WALK))


@lru_cache(maxsize=256)
def _covariance(boxes: int, m: int, modified: bool) -> FloatArray:
    """Autocovariance of the differences over their variance, from lag 0 to the last that is not 0.

    The differences are white noise through ``boxes`` running sums over m (one more if modified) and 2 - ``boxes``
    differences over m; so their autocovariance is a sum of B-splines, shifted by multiples of m.
    """
    order, turns = 2 * (boxes + modified), 2 - boxes
    lag = np.arange((boxes + modified + turns) * m + 1)
    total = np.zeros(len(lag))
    for shift in range(-turns, turns + 1):
        total += (-1) ** shift * math.comb(2 * turns, turns + shift) * _spline(order, np.abs(lag - shift * m), m)
    return total / total[0]


def _spline(order: int, lag: FloatArray, m: int) -> FloatArray:
    """Autocorrelation of order/2 running sums over m: how many ways order numbers from 0 to m - 1 sum up to the middle + lag."""
    if not order:
        return (lag == 0).astype(np.float64)
    rest = order * (m - 1) // 2 - lag.astype(np.float64)
    total = np.zeros(len(lag))
    for j in range(order // 2 + 1):
        left = rest - j * m
        ways = np.prod([(left + k) / k for k in range(1, order)], axis=0)
        total += np.where(left >= 0.0, (-1) ** j * math.comb(order, j) * ways, 0.0)
    return total
