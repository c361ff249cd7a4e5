"""Robust straight-line trend of a bench's level, with an error that allows for autocorrelation."""

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from scipy import stats

from analysis.drift.bins import bin_means
from analysis.drift.effective import variance_inflation
from analysis.quantities import US_PER_S, FloatArray, IntArray, db_from_ratio

_DAY_US = 86_400 * US_PER_S
_FEWEST_BINS = 8
_FEWEST_EFFECTIVE = 5.0
_MOST_BINS = 2000
_LEAST_COVER = 0.5


class TrendVerdict(StrEnum):
    """What a record allows to be said of its trend."""

    RISING = "rising"
    FALLING = "falling"
    NOT_SHOWN = "no trend shown"
    TOO_SHORT = "record too short"


@dataclass(frozen=True, slots=True)
class Trend:
    """Median of all pairwise slopes (Theil–Sen).

    Attributes:
        per_day, low_per_day, high_per_day: Slope and its 95 % interval, unit of the level per day; NaN where too short.
        level: Level at ``middle_us``, the median of the bins' times, µs. ``level_se``: its standard error.
        effective_bins: Independent bins that the ``bins`` are worth.
    """

    verdict: TrendVerdict
    per_day: float
    low_per_day: float
    high_per_day: float
    level: float
    level_se: float
    middle_us: int
    bins: int
    effective_bins: float

    def reaches_us(self, level: float) -> tuple[float, float]:
        """Earliest and latest time, µs, at which the trend meets a level, by the ends of its slope's interval.

        NaN for an end that moves away from the level; a level already passed gives times in the past. Source: F-72.
        """
        times = [self.middle_us + (level - self.level) / slope * _DAY_US if slope else np.nan
                 for slope in (self.low_per_day, self.high_per_day)]
        ahead = sorted(time for time in times if time >= self.middle_us)
        return (ahead[0], ahead[1] if len(ahead) == 2 else np.nan) if ahead else (np.nan, np.nan)


def trend(at_us: IntArray, level: FloatArray, bin_s: float) -> Trend:
    """Trend of a level that may be averaged, such as an angle in degrees or a temperature.

    Args:
        at_us: Times, µs, shape (N,), sorted; any spacing. ``level``: shape (N,); NaN is left out.
        bin_s: Length of the bins whose means are compared, s; make it a whole number of any daily or air cycle.
    Returns:
        The trend over bin means; bins that hold under half of the usual number of readings are left out, gaps are kept. The
        interval comes from Kendall's variance times (1 + ρ)/(1 - ρ), or more where waves remain. Too short: under 8 bins, or
        worth under 5 independent ones. A random walk of some 40 bins may pass for a trend: compare with its structure
        function.
    Raises:
        ValueError: The shapes differ, ``bin_s`` is not above 0, or there are more than 2000 bins.
    Source: docs/formulas.md, F-72.
    """
    number, means, at = _binned(at_us, level, bin_s)
    return _theil_sen(number, at, means)


def leak_trend_db(at_us: IntArray, wanted_power: FloatArray, other_power: FloatArray, bin_s: float) -> Trend:
    """Trend of the leak in dB: powers are summed over each bin, and only the ratio of the sums is put in dB.

    Args:
        at_us, bin_s: As `trend`. ``wanted_power``, ``other_power``: Nets, any common unit, signed, shape (N,); NaN leaves a
            reading out.
    Returns:
        Slope in dB per day of 10 log₁₀(Σ other/Σ wanted), so a rising trend is a falling ER. Bins whose sum is not above 0 are
        left out. Source: docs/formulas.md, F-16, F-72.
    """
    both = np.stack([np.asarray(wanted_power, np.float64), np.asarray(other_power, np.float64)], axis=-1)
    number, means, at = _binned(at_us, both, bin_s)
    ratio = means[:, 1] / np.where(means[:, 0] > 0.0, means[:, 0], np.nan) if len(means) else np.zeros(0)
    leak_db = db_from_ratio(ratio)
    known = np.isfinite(leak_db)
    return _theil_sen(number[known], at[known], leak_db[known])


def _binned(at_us: IntArray, level: FloatArray, bin_s: float) -> tuple[IntArray, FloatArray, FloatArray]:
    """Numbers, means and mean times of the bins that are at least half full."""
    level = np.asarray(level, np.float64)
    if len(at_us) != len(level):
        raise ValueError(f"at_us has {len(at_us)} times, level {len(level)} readings; pass one time per reading.")
    if not bin_s > 0.0:
        raise ValueError(f"bin_s={bin_s!r} must be above 0.")
    known = np.all(np.isfinite(level), axis=-1) if level.ndim > 1 else np.isfinite(level)
    at_us, level, tau_us = np.asarray(at_us, np.int64)[known], level[known], round(bin_s * US_PER_S)
    number, means = bin_means(at_us, level, tau_us)
    if len(number) > _MOST_BINS:
        raise ValueError(f"bin_s={bin_s!r} s cuts the record into {len(number)} bins; make it longer, {_MOST_BINS} is the most.")
    if not len(number):
        return number, means, np.zeros(0)
    held = np.diff(np.searchsorted(at_us // tau_us, number), append=len(at_us))
    _, offsets = bin_means(at_us, (at_us - number[0] * tau_us).astype(np.float64), tau_us)
    full = held >= _LEAST_COVER * np.median(held)
    return number[full], means[full], offsets[full] + float(number[0] * tau_us)


def _theil_sen(number: IntArray, at: FloatArray, level: FloatArray) -> Trend:
    count = len(level)
    if count < _FEWEST_BINS:
        nan = float("nan")
        return Trend(TrendVerdict.TOO_SHORT, nan, nan, nan, nan, nan, int(np.median(at)) if count else 0, count, nan)
    middle = float(np.median(at))
    day = (at - middle) / _DAY_US
    early, late = np.triu_indices(count, 1)
    slopes = np.sort((level[late] - level[early]) / (day[late] - day[early]))
    slope = float(np.median(slopes))
    left = level - slope * day
    centre = float(np.median(left))
    inflation = variance_inflation(number, left - left.mean(), fitted=2)
    effective = count / inflation
    spread = stats.norm.ppf(0.975) * np.sqrt(count * (count - 1) * (2 * count + 5) / 18.0 * inflation)
    low = int(np.floor(0.5 * (len(slopes) - spread))) - 1
    high = len(slopes) - 1 - low
    is_short = effective < _FEWEST_EFFECTIVE or low < 0
    ends = (float("nan"), float("nan")) if is_short else (float(slopes[low]), float(slopes[min(high, len(slopes) - 1)]))
    error = float(1.2533 * np.std(left, ddof=2) * np.sqrt(inflation / count))
    verdict = _verdict(is_short, *ends)
    return Trend(verdict, float("nan") if is_short else slope, *ends, centre, error, int(middle), count, float(effective))


def _verdict(is_short: bool, low: float, high: float) -> TrendVerdict:
    if is_short:
        return TrendVerdict.TOO_SHORT
    if low > 0.0:
        return TrendVerdict.RISING
    return TrendVerdict.FALLING if high < 0.0 else TrendVerdict.NOT_SHOWN
