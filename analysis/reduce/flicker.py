"""Extinction ratio from the source's own flicker: free of dark current, room light and a wrong zero.

Fast changes of the dark port are regressed on those of the bright port. What is carried by the light follows the source;
what is added to the dark port does not. It needs flicker that both ports see at the same instant (one converter, or
less than a hundredth of the interval apart), equal bandwidth, and no mode hop inside the window.
"""

from dataclasses import dataclass
from enum import StrEnum
from typing import Any, Final

import numpy as np

from analysis.quantities import DB_PER_NEPER_OF_POWER, BoolArray, FloatArray
from analysis.reduce.extinction import CONFIDENCE, DETECTION_SIGMA, upper_limit
from analysis.reduce.leakage import leak_before_splitter

FEWEST_CHANGES: Final = 100
LEAST_RELIABILITY: Final = 0.8  # four parts of flicker to one of noise, in variance
LARGEST_SHARE: Final = 0.05  # of one change in the slope's weight, for many changes
SHARE_OF_FEW: Final = 20.0  # more is allowed where there are few
LARGEST_AUTOCORRELATION: Final = 0.1
AUTOCORRELATION_SIGMA: Final = 4.0
WATCHED_LAGS: Final = 10
BEND_SIGMA: Final = 5.0
LARGEST_BEND: Final = 0.1
ADJACENT_INTERVALS: Final = 1.5


class FlickerState(StrEnum):
    """Whether the slope is a measurement, and if not, why not."""

    MEASURED = "measured"
    BOUND = "only a bound: the dark port does not follow the bright one"
    TOO_FEW = "not measurable: too few changes"
    TOO_QUIET = "not measurable: the source flickers too little above the detector's noise"
    ONE_STEP = "not measurable: one step carries the slope"
    NOT_WHITE = "not measurable: what is left of the dark port is not noise"
    NOT_LINEAR = "not measurable: the slope depends on the power"


@dataclass(frozen=True, slots=True, kw_only=True)
class FlickerEr:
    """ER by flicker slope and the figures its validity rests on.

    ``er_db``, ``leak`` and ``offset`` are NaN where not measurable; the figures below them are given as far as known.

    Attributes:
        er_db, er_sigma_db: dB; a one-sided bound (sigma NaN) where ``is_lower_bound``.
        leak, leak_sigma: Dark / bright with gain and splitter leakage taken off, signed.
        offset, offset_sigma: What the dark port reads without light: mean dark - slope * mean bright, its raw unit. It
            is the error of the zero where the readings have one taken off. Leak that changed in the window adds to it.
        count: Changes between adjacent samples.
        reliability: Share of the bright port's change variance that is flicker, not its detector's noise.
        correlation: Of the changes of both ports.
        neighbour_autocorrelation: Of the residual changes at lag 1: -0.5 for white detector noise, towards 0 for drift.
        far_autocorrelation: Largest at lags 2 to 10, with its sign: 0 for noise and drift; hum or a time skew raise it.
        largest_share: Of one change in the slope's weight.
        bend, bend_sigma: Relative change of the slope per standard deviation of the bright level.
    """

    state: FlickerState
    er_db: float = np.nan
    er_sigma_db: float = np.nan
    is_lower_bound: bool = False
    leak: float = np.nan
    leak_sigma: float = np.nan
    offset: float = np.nan
    offset_sigma: float = np.nan
    count: int = 0
    reliability: float = np.nan
    correlation: float = np.nan
    neighbour_autocorrelation: float = np.nan
    far_autocorrelation: float = np.nan
    largest_share: float = np.nan
    bend: float = np.nan
    bend_sigma: float = np.nan


def flicker_er(
    bright: FloatArray,
    dark: FloatArray,
    at_s: FloatArray | None = None,
    *,
    bright_sigma: float,
    gain_ratio: float = 1.0,
    leakage: Any = None,
    leakage_sigma: Any = None,
    confidence: float = CONFIDENCE,
) -> FlickerEr:
    """ER from the slope of first differences, dark port on bright port, with noise in both.

    The slope is Sxy / (Sxx - 2 N bright_sigma^2): the bright port's own noise would flatten it and is known, the dark
    port may scatter for any reason. Its sigma comes from the residuals, neighbouring differences share a reading.

    Args:
        bright, dark: Readings of port 1 and 2 in one linear unit, shape (N,); the zero of the dark port does not matter.
        at_s: Their times, s, rising, shape (N,); None: evenly spaced without gaps. Changes across a gap (more than 1.5
            usual intervals) or beside a NaN are left out, never bridged.
        bright_sigma: 1 sigma of the detector noise of one bright reading, above 0, from a dark check or the floor.
        gain_ratio: Gain of the bright / gain of the dark port.
        leakage, leakage_sigma: [[a, b], [c, d]] of the splitter, shape (2, 2), as `analysis.reduce.leakage`.
        confidence: Level of a bound.
    Returns:
        See `FlickerEr`. Validity is checked in the order of `FlickerState`. Source: docs/formulas.md, F-31, F-32.
    Raises:
        ValueError: Shapes differ, times do not rise, or ``bright_sigma`` is not above 0.
    """
    if not bright_sigma > 0.0:
        raise ValueError(f"bright_sigma={bright_sigma!r} must be above 0; without it flicker cannot be told from noise.")
    bright, dark = np.asarray(bright, dtype=np.float64), np.asarray(dark, dtype=np.float64)
    if bright.shape != dark.shape or bright.ndim != 1:
        raise ValueError(f"bright has shape {bright.shape}, dark {dark.shape}; pass one sample of each port per reading.")
    bright_change, dark_change, is_change = _changes(bright, dark, at_s)
    count = int(is_change.sum())
    if count < FEWEST_CHANGES:
        return FlickerEr(state=FlickerState.TOO_FEW, count=count)
    noise = 2.0 * count * bright_sigma**2
    sxx, sxy, syy = bright_change @ bright_change, bright_change @ dark_change, dark_change @ dark_change
    figures: dict[str, Any] = {
        "count": count,
        "reliability": float((sxx - noise) / sxx) if sxx > 0.0 else np.nan,
        "correlation": float(sxy / np.sqrt(sxx * syy)) if sxx > 0.0 and syy > 0.0 else np.nan,
    }
    if not figures["reliability"] >= LEAST_RELIABILITY:
        return FlickerEr(state=FlickerState.TOO_QUIET, **figures)
    slope = sxy / (sxx - noise)
    residual = dark_change - slope * bright_change
    scores = np.where(is_change, bright_change * residual + slope * 2.0 * bright_sigma**2, 0.0)
    slope_sigma = np.sqrt(_variance_of_sum(scores)) / (sxx - noise)
    figures |= _residual_figures(residual, is_change) | {"largest_share": float(np.max(bright_change**2) / sxx)}
    figures |= _bend(bright, bright_change, residual, is_change, slope)
    state = _state(figures, count)
    if state is not FlickerState.MEASURED:
        return FlickerEr(state=state, **figures)
    both = np.isfinite(bright) & np.isfinite(dark)
    mean_bright, mean_dark = bright[both].mean(), dark[both].mean()
    figures |= {"offset": float(mean_dark - slope * mean_bright), "offset_sigma": float(slope_sigma * abs(mean_bright))}
    leak, leak_sigma = slope * gain_ratio, slope_sigma * gain_ratio
    if leakage is not None:
        leak, leak_sigma = (float(x) for x in leak_before_splitter(leak, leakage, leak_sigma, leakage_sigma))
    return FlickerEr(**_er(leak, leak_sigma, confidence), leak=float(leak), leak_sigma=float(leak_sigma), **figures)


def _changes(bright: FloatArray, dark: FloatArray, at_s: FloatArray | None) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Changes between adjacent samples, less their mean, 0 where there is none; and where there is one. Shape (N - 1,)."""
    bright_change, dark_change = np.diff(bright), np.diff(dark)
    is_change = np.isfinite(bright_change) & np.isfinite(dark_change)
    if at_s is not None:
        interval_s = np.diff(np.asarray(at_s, dtype=np.float64))
        if interval_s.shape != is_change.shape or not (interval_s > 0.0).all():
            raise ValueError(f"at_s has {len(interval_s) + 1} times for {len(bright)} readings or does not rise; sort by time.")
        if interval_s.size:
            is_change &= interval_s <= ADJACENT_INTERVALS * np.median(interval_s)
    for change in (bright_change, dark_change):
        change[~is_change] = 0.0
        if is_change.any():
            change -= change.sum() / is_change.sum()
            change[~is_change] = 0.0
    return bright_change, dark_change, is_change


def _variance_of_sum(scores: FloatArray) -> float:
    """Variance of a sum of terms of which only neighbours are correlated (differences of white noise)."""
    own = scores @ scores
    with_neighbours = own + 2.0 * (scores[1:] @ scores[:-1])
    return float(with_neighbours if with_neighbours > 0.0 else own)


def _residual_figures(residual: FloatArray, is_change: BoolArray) -> dict[str, float]:
    """Autocorrelations of the residual changes (0 where there is none, so that gaps do not count)."""
    power = residual @ residual
    if not power > 0.0:
        return {"neighbour_autocorrelation": np.nan, "far_autocorrelation": 0.0}
    count, has_all = is_change.sum(), bool(is_change.all())
    rho = np.zeros(WATCHED_LAGS)
    for lag in range(1, WATCHED_LAGS + 1):
        pairs = len(residual) - lag if has_all else np.count_nonzero(is_change[lag:] & is_change[:-lag])
        rho[lag - 1] = (residual[lag:] @ residual[:-lag]) / power * count / max(pairs, 1)
    far = rho[1:]
    return {"neighbour_autocorrelation": float(rho[0]), "far_autocorrelation": float(far[np.argmax(np.abs(far))])}


def _bend(
    bright: FloatArray, bright_change: FloatArray, residual: FloatArray, is_change: BoolArray, slope: float
) -> dict[str, float]:
    """Relative change of the slope per standard deviation of the bright level, with 1 sigma."""
    level = np.where(is_change, 0.5 * (bright[1:] + bright[:-1]), 0.0)
    level -= level.sum() / is_change.sum()
    level[~is_change] = 0.0
    level *= np.sqrt(is_change.sum() / max(level @ level, np.finfo(float).tiny))
    regressor = bright_change * level
    power = regressor @ regressor
    if not power > 0.0 or slope == 0.0:
        return {"bend": np.nan, "bend_sigma": np.nan}
    scores = regressor * residual
    return {
        "bend": float(scores.sum() / power / slope),
        "bend_sigma": float(np.sqrt(_variance_of_sum(scores)) / power / abs(slope)),
    }


def _state(figures: dict[str, Any], count: int) -> FlickerState:
    """First fault found; the rules are our own (F-32)."""
    if figures["largest_share"] > LARGEST_SHARE + SHARE_OF_FEW / count:
        return FlickerState.ONE_STEP
    allowed = LARGEST_AUTOCORRELATION + AUTOCORRELATION_SIGMA * np.sqrt(1.5 / count)
    neighbour = figures["neighbour_autocorrelation"]
    if abs(figures["far_autocorrelation"]) > allowed or neighbour > allowed or neighbour < -0.5 - allowed:
        return FlickerState.NOT_WHITE
    if abs(figures["bend"]) > max(LARGEST_BEND, BEND_SIGMA * figures["bend_sigma"]):
        return FlickerState.NOT_LINEAR
    return FlickerState.MEASURED


def _er(leak: float, leak_sigma: float, confidence: float) -> dict[str, Any]:
    if leak > 0.0 and leak >= DETECTION_SIGMA * leak_sigma:
        er_sigma_db = DB_PER_NEPER_OF_POWER * leak_sigma / leak
        return {"state": FlickerState.MEASURED, "er_db": float(-10.0 * np.log10(leak)), "er_sigma_db": float(er_sigma_db)}
    if leak_sigma > 0.0:
        limit = upper_limit(np.asarray(leak, dtype=np.float64), np.asarray(leak_sigma, dtype=np.float64), confidence)
        return {"state": FlickerState.BOUND, "er_db": float(-10.0 * np.log10(limit)), "is_lower_bound": True}
    return {"state": FlickerState.BOUND, "is_lower_bound": True}
