"""All that one span of a tap tells: its night, what the means are worth, trend, response to temperature, thermal arc.

Source: docs/formulas.md, F-69 to F-77 and F-118.
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.drift.arc_leak import LeakArc, fit_leak_arc
from analysis.drift.arc_sphere import SphereArc, fit_sphere_arc
from analysis.drift.effective import block_inflation
from analysis.drift.night import NightStatistics, night_statistics, usable_leak, usable_sop, usable_values
from analysis.drift.temperature import TemperatureResponse, temperature_response
from analysis.drift.trend import Trend, leak_trend_db, trend
from analysis.judge.rule import Quantity
from analysis.quantities import US_PER_S, FloatArray, IntArray, er_db_from_leak
from analysis.reduce.sample import Reduced

#: Temperatures farther in time than this from a reading say nothing of it.
LONGEST_TEMPERATURE_GAP_S: Final = 600.0
_Z_95: Final = 1.959963984540054
_TREND_BINS, _RESPONSE_BINS, _LAG_BINS = 48, 1440, 60
_LEAST_TREND_BIN_S, _LEAST_RESPONSE_BIN_S = 10.0, 60.0


@dataclass(frozen=True, slots=True)
class Temperature:
    """Temperatures near a tap, sorted by time.

    Attributes:
        at_us: µs, shape (M,). ``temperature_c``: °C, shape (M,); NaN is left out.
    """

    at_us: IntArray
    temperature_c: FloatArray


@dataclass(frozen=True, slots=True)
class MeanError:
    """What a mean of correlated readings is worth.

    Attributes:
        standard_error: 1 σ of the mean, in the quantity's unit; NaN below two readings.
        effective: Independent readings that the ``count`` readings are worth.
    """

    standard_error: float
    effective: float
    count: int


@dataclass(frozen=True, slots=True, kw_only=True)
class TapStatistics:
    """Statistics of one span of one tap.

    Attributes:
        night: Those of `night_statistics`. ``leak_error``, ``angle_error``, ``power_error``: of the means of leak, angle (rad)
            and power (W).
        leak_mean_low_db, leak_mean_high_db: 95 % interval of the ER of the mean leak, dB; the high end is inf where the
            mean leak may be 0.
        angle_trend: degrees per day; leak_trend: dB per day.
        response: Of the angle in degrees to temperature; None without temperatures.
        arc: Thermal arc; None without temperatures (two ports) or wanted state (Stokes vectors).
    """

    night: NightStatistics
    leak_error: MeanError
    angle_error: MeanError
    power_error: MeanError
    leak_mean_low_db: float
    leak_mean_high_db: float
    angle_trend: Trend
    leak_trend: Trend
    response: TemperatureResponse | None
    arc: LeakArc | SphereArc | None


def tap_statistics(
    reduced: Reduced,
    *,
    interval_s: float | None = None,
    temperature: Temperature | None = None,
    wanted_state: FloatArray | None = None,
) -> TapStatistics:
    """Statistics of one span of one tap.

    Args:
        reduced: Samples of the span, sorted by time, shape (N,), N at least 2. Untrusted values are left out.
        interval_s: Nominal spacing, s; the median spacing if left out.
        temperature: Of the air or the fibre; its times may be others.
        wanted_state: Unit Stokes vector, shape (3,), for the arc of a tap that measures Stokes vectors.
    Raises:
        ValueError: Fewer than two samples.
    """
    if len(reduced) < 2:
        raise ValueError(f"reduced holds {len(reduced)} sample(s); statistics need at least two: choose a longer span.")
    at_us, angle_rad = reduced.at_us, usable_values(reduced, Quantity.ANGLE_DEG, reduced.angle_rad)
    leak = usable_leak(reduced)
    leak_error, mean = mean_error(at_us, leak), _mean(leak)
    low, high = (float(er_db_from_leak(max(mean + side * _Z_95 * leak_error.standard_error, 0.0))) for side in (1.0, -1.0))
    wanted, other = (np.where(np.isfinite(leak), power, np.nan) for power in (reduced.wanted_power, reduced.other_power))
    span_s = (int(at_us[-1]) - int(at_us[0])) / US_PER_S
    trend_bin_s = max(span_s / _TREND_BINS, _LEAST_TREND_BIN_S)
    angle_deg = np.degrees(angle_rad)
    return TapStatistics(
        night=night_statistics(reduced, interval_s), leak_error=leak_error, angle_error=mean_error(at_us, angle_rad),
        power_error=mean_error(at_us, usable_values(reduced, Quantity.POWER_W, reduced.power_w)),
        leak_mean_low_db=low, leak_mean_high_db=high, angle_trend=trend(at_us, angle_deg, trend_bin_s),
        leak_trend=leak_trend_db(at_us, wanted, other, trend_bin_s),
        response=None if temperature is None else _response(at_us, angle_deg, temperature, span_s),
        arc=_arc(reduced, leak, temperature, wanted_state),
    )  # fmt: skip


def mean_error(at_us: IntArray, values: FloatArray) -> MeanError:
    """Standard error of a mean, widened by the readings' autocorrelation.

    Args:
        at_us: Times, µs, shape (N,), sorted. ``values``: any unit, shape (N,); NaN is left out.
    Source: docs/formulas.md, F-70, F-118.
    """
    known = np.isfinite(values)
    count = int(known.sum())
    if count < 2:
        return MeanError(math.nan, float(count), count)
    kept = values if known.all() else values[known]
    left = kept - kept.mean()
    inflation = block_inflation(at_us if known.all() else at_us[known], left)
    variance = float(left @ left) / (count - 1)
    return MeanError(math.sqrt(variance * inflation / count), count / inflation, count)


def temperatures_at(at_us: IntArray, temperature: Temperature) -> FloatArray:
    """Temperature at each time, °C, straight between neighbours; NaN over gaps of more than twice 10 min and beyond the ends.

    Args:
        at_us: µs, shape (N,).
    """
    known = np.isfinite(temperature.temperature_c)
    times, degrees = temperature.at_us[known], temperature.temperature_c[known]
    if not len(times):
        return np.full(len(at_us), np.nan)
    place = np.searchsorted(times, at_us)
    before, after = np.maximum(place - 1, 0), np.minimum(place, len(times) - 1)
    apart_us = np.minimum(np.abs(at_us - times[before]), np.abs(times[after] - at_us))
    is_near = apart_us <= LONGEST_TEMPERATURE_GAP_S * US_PER_S
    return np.where(is_near, np.interp(at_us, times, degrees), np.nan)


def _mean(values: FloatArray) -> float:
    known = values[np.isfinite(values)]
    return float(known.mean()) if len(known) else math.nan


def _response(at_us: IntArray, angle_deg: FloatArray, temperature: Temperature, span_s: float) -> TemperatureResponse:
    bin_s = max(span_s / _RESPONSE_BINS, _LEAST_RESPONSE_BIN_S)
    return temperature_response(
        at_us, angle_deg, temperature.at_us, temperature.temperature_c, bin_s=bin_s, longest_lag_s=_LAG_BINS * bin_s
    )


def _arc(
    reduced: Reduced, leak: FloatArray, temperature: Temperature | None, wanted_state: FloatArray | None
) -> LeakArc | SphereArc | None:
    sop = usable_sop(reduced)
    if sop is not None:
        return None if wanted_state is None else fit_sphere_arc(reduced.at_us, sop, np.asarray(wanted_state, np.float64))
    return None if temperature is None else fit_leak_arc(reduced.at_us, leak, temperatures_at(reduced.at_us, temperature))
