"""How a level follows the temperature: lag, slope, and whether there is a relation at all."""

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from scipy import stats

from analysis.drift.bins import bin_means
from analysis.drift.effective import autocorrelation, correlation_effective_size
from analysis.drift.hac import regress
from analysis.quantities import US_PER_S, FloatArray, IntArray

_FEWEST_PAIRS = 20


class ResponseVerdict(StrEnum):
    """Whether a level follows the temperature."""

    SHOWN = "relation shown"
    NOT_SHOWN = "no relation shown"
    TOO_SHORT = "record too short"


@dataclass(frozen=True, slots=True)
class TemperatureResponse:
    """Straight-line response y(t) = c + s T(t - lag).

    Attributes:
        per_k, per_k_se: s and its HAC standard error, unit of the level per K; NaN unless shown.
        lag_s, lag_low_s, lag_high_s: Lag of the level behind the temperature and its 95 % interval, s, in whole bins.
        correlation: r at that lag. ``chance``: of so large an |r| at any lag tried, between unrelated series of such
        autocorrelation. ``pairs``, ``effective_pairs``: pairs of bins, and independent ones they are worth.
    """

    verdict: ResponseVerdict
    per_k: float
    per_k_se: float
    lag_s: float
    lag_low_s: float
    lag_high_s: float
    correlation: float
    chance: float
    pairs: int
    effective_pairs: float


def temperature_response(
    at_us: IntArray,
    level: FloatArray,
    temperature_at_us: IntArray,
    temperature_k: FloatArray,
    *,
    bin_s: float,
    longest_lag_s: float,
) -> TemperatureResponse:
    """Find the lag and slope with which a level follows the temperature.

    Args:
        at_us, level: Times, µs, sorted, and readings of the level (angle, leak …; not dB), shape (N,); NaN is left out.
        temperature_at_us, temperature_k: The same of the temperature, K or °C, shape (M,); its times may be others.
        bin_s: Both are averaged over bins of this length, s; gaps stay gaps. ``longest_lag_s``: lags 0 … this are tried.
    Returns:
        ``NOT_SHOWN`` where the chance, times the lags tried, is over 1 %; ``TOO_SHORT`` under 20 pairs or 5 effective ones. Both
        series lose their straight trend before the test, so that two mere drifts do not count as a relation. The slope's
        error does not hold the lag's. For a PM cord, whose leak follows a cosine, see `arc_leak`.
    Raises:
        ValueError: Shapes differ, or ``bin_s`` or ``longest_lag_s`` make no bins.
    Source: docs/formulas.md, F-73, F-74.
    """
    if not (bin_s > 0.0 and longest_lag_s >= 0.0):
        raise ValueError(f"bin_s={bin_s!r} must be above 0 and longest_lag_s={longest_lag_s!r} at least 0.")
    y_number, y = _bins(at_us, level, bin_s)
    x_number, x = _bins(temperature_at_us, temperature_k, bin_s)
    lags = int(longest_lag_s // bin_s) + 1
    r, pairs = lagged_correlation(x_number, _straightened(x_number, x), y_number, _straightened(y_number, y), lags - 1)
    if not np.any(pairs >= _FEWEST_PAIRS):
        return _nothing(ResponseVerdict.TOO_SHORT, int(pairs.max(initial=0)))
    best = int(np.nanargmax(np.where(pairs >= _FEWEST_PAIRS, np.abs(r), np.nan)))
    count = int(pairs[best])
    reach = max(count // 4, 1)
    own = autocorrelation(x_number, _straightened(x_number, x), reach)
    other = autocorrelation(y_number, _straightened(y_number, y), reach)
    effective = correlation_effective_size(count, own, other)
    if effective < 5.0:
        return _nothing(ResponseVerdict.TOO_SHORT, count, effective)
    t = abs(r[best]) * np.sqrt((effective - 2.0) / max(1.0 - r[best] ** 2, 1e-15))
    chance = min(1.0, lags * 2.0 * float(stats.t.sf(t, effective - 2.0)))
    if chance > 0.01:
        return _nothing(ResponseVerdict.NOT_SHOWN, count, effective, float(r[best]), chance)
    left = 1.0 - r**2
    near = np.flatnonzero((left <= left[best] * (1.0 + 3.841 / effective)) & (pairs >= _FEWEST_PAIRS))
    place = np.searchsorted(x_number, y_number - best)
    has = (place < len(x_number)) & (x_number[np.minimum(place, len(x_number) - 1)] == y_number - best)
    design = np.stack([np.ones(has.sum()), x[place[has]] - x.mean()], axis=1)
    fit = regress(y_number[has], design, y[has], lags=max(1, int(np.ceil(count / effective))))
    return TemperatureResponse(
        ResponseVerdict.SHOWN, float(fit.coefficient[1]), float(fit.standard_error[1]), best * bin_s,
        float(near.min() * bin_s), float(near.max() * bin_s), float(r[best]), chance, count, effective,
    )


def lagged_correlation(
    x_number: IntArray, x: FloatArray, y_number: IntArray, y: FloatArray, lags: int
) -> tuple[FloatArray, IntArray]:
    """Correlation of x(bin) with y(bin + l) over the bins that both have, l = 0 … lags; l > 0: y follows x.

    Args:
        x_number, x: Bin numbers, strictly rising, and levels, shape (M,). ``y_number``, ``y``: the same, shape (N,).
    Returns:
        r, shape (lags + 1,), NaN under 3 pairs or without variation, each with means of its own pairs; and the pairs' number.
    Source: docs/formulas.md, F-73.
    """
    r, pairs = np.full(lags + 1, np.nan), np.zeros(lags + 1, dtype=np.int64)
    for lag in range(lags + 1):
        _, here, there = np.intersect1d(x_number + lag, y_number, assume_unique=True, return_indices=True)
        pairs[lag] = len(here)
        if len(here) < 3:
            continue
        one, other = x[here] - x[here].mean(), y[there] - y[there].mean()
        size = np.sqrt((one @ one) * (other @ other))
        if size > 0.0:
            r[lag] = one @ other / size
    return r, pairs


def _bins(at_us: IntArray, level: FloatArray, bin_s: float) -> tuple[IntArray, FloatArray]:
    level = np.asarray(level, np.float64)
    if np.shape(at_us) != level.shape:
        raise ValueError(f"times have shape {np.shape(at_us)}, readings {level.shape}; pass one time per reading.")
    known = np.isfinite(level)
    return bin_means(np.asarray(at_us, np.int64)[known], level[known], round(bin_s * US_PER_S))


def _straightened(number: IntArray, level: FloatArray) -> FloatArray:
    """Level less its straight line over time."""
    if len(level) < 3:
        return level
    place = (number - number.mean()) / max(float(np.ptp(number)), 1.0)
    slope = place @ level / (place @ place)
    return level - level.mean() - slope * place


def _nothing(
    verdict: ResponseVerdict, pairs: int, effective: float = np.nan, correlation: float = np.nan, chance: float = np.nan
) -> TemperatureResponse:
    nan = float("nan")
    return TemperatureResponse(verdict, nan, nan, nan, nan, nan, correlation, chance, pairs, effective)
