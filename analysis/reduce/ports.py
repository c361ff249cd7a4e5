"""Two-port and dark-port taps: raw port powers to net powers and extinction ratio."""

from collections.abc import Mapping
from typing import Any

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import (
    DB_PER_NEPER_OF_POWER,
    BoolArray,
    FloatArray,
    angle_rad_from_er_db,
    linear_from_raw,
    watts_per_unit,
)
from analysis.reduce.calibration import TapCalibration, as_optional
from analysis.reduce.extinction import extinction
from analysis.reduce.leakage import PortNets, without_leakage
from analysis.reduce.trust import Reason, ReasonArray, marked

Columns = Mapping[str, FloatArray]


def reduce_two_port(columns: Columns, unit: str, cal: TapCalibration) -> tuple[dict[str, Any], dict[Quantity, ReasonArray]]:
    """Quantities of two-port readings.

    Args:
        columns: ``port1``, ``port2`` as sent in ``unit``, shape (N,); optional ``…_sd`` with ``averaged``, ``clipped``.
    Returns:
        Fields of `Reduced`, and reasons per quantity. Source: docs/formulas.md, F-01, F-05 to F-09, F-22.
    """
    raw1, raw2 = linear_from_raw(columns["port1"], unit), linear_from_raw(columns["port2"], unit)
    sigma1 = _sigma(columns, "port1", unit, raw1, cal.floor1)
    sigma2 = _sigma(columns, "port2", unit, raw2, cal.floor2)
    first, second = raw1 - cal.zero1, (raw2 - cal.zero2) * cal.gain_ratio
    nets = without_leakage(PortNets(first, second, sigma1, sigma2 * cal.gain_ratio, 0.0), cal.leakage, cal.leakage_sigma)
    is_saturated = _is_saturated(columns, ((raw1, cal.saturation1), (raw2, cal.saturation2)))
    return _quantities(nets, unit, cal, is_saturated, is_declared=None)


def reduce_dark_port(columns: Columns, unit: str, cal: TapCalibration) -> tuple[dict[str, Any], dict[Quantity, ReasonArray]]:
    """Quantities of dark-port readings: the bright power comes from a monitor, or is declared (then doubtful).

    Args:
        columns: ``port2`` and optional ``monitor`` as sent in ``unit``, shape (N,). The monitor's zero, floor and
            saturation are those of port 1.
    Returns:
        As `reduce_two_port`; ``power_w`` is that of both ports, so it rests on the monitor as well. Source: F-01, F-10, F-22.
    """
    raw2 = linear_from_raw(columns["port2"], unit)
    count = len(raw2)
    monitor_ratio, declared = as_optional(cal.monitor_ratio), np.broadcast_to(as_optional(cal.bright_nominal), count)
    raw_monitor = linear_from_raw(columns["monitor"], unit) if "monitor" in columns else np.full(count, np.nan)
    watched = (raw_monitor - cal.zero1) * monitor_ratio
    is_declared = np.isnan(watched)
    bright = np.where(is_declared, declared, watched)
    bright_sigma = np.where(is_declared, 0.0, np.abs(cal.floor1 * np.nan_to_num(monitor_ratio)))
    dark, dark_sigma = (raw2 - cal.zero2) * cal.gain_ratio, _sigma(columns, "port2", unit, raw2, cal.floor2) * cal.gain_ratio
    if cal.leakage is not None:
        leakage = np.asarray(cal.leakage, dtype=np.float64)
        dark = (dark - leakage[..., 1, 0] * bright) / leakage[..., 1, 1]
        dark_sigma = np.hypot(dark_sigma, leakage[..., 1, 0] * bright_sigma)
        if cal.leakage_sigma is not None:
            unsure = np.asarray(cal.leakage_sigma, dtype=np.float64)
            dark_sigma = np.hypot(dark_sigma, np.hypot(unsure[..., 1, 0] * bright, unsure[..., 1, 1] * dark))
        dark_sigma = dark_sigma / np.abs(leakage[..., 1, 1])
    is_saturated = _is_saturated(columns, ((raw_monitor, cal.saturation1), (raw2, cal.saturation2)))
    fields, reasons = _quantities(
        PortNets(bright, dark, bright_sigma, dark_sigma, 0.0), unit, cal, is_saturated, is_declared=is_declared
    )
    return fields, reasons


def _sigma(columns: Columns, port: str, unit: str, raw: FloatArray, floor: Any) -> FloatArray:
    """1 sigma of a net reading, raw linear unit: the floor, and the standard error of the averaged samples where sent."""
    floor = np.broadcast_to(np.asarray(floor, dtype=np.float64), raw.shape)
    spread, averaged = columns.get(f"{port}_sd"), columns.get("averaged")
    if spread is None or averaged is None:
        return floor
    if unit == "dBm":
        spread = spread * np.abs(raw) / DB_PER_NEPER_OF_POWER
    error = spread / np.sqrt(np.maximum(averaged, 1.0))
    return np.hypot(floor, np.nan_to_num(error))


def _is_saturated(columns: Columns, ports: tuple[tuple[FloatArray, Any], ...]) -> BoolArray:
    """True where a raw reading is at or above its saturation, or the station says it was clipped."""
    clipped = columns.get("clipped")
    is_saturated = np.zeros(ports[0][0].shape, dtype=bool) if clipped is None else np.nan_to_num(clipped) > 0.0
    for raw, saturation in ports:
        if saturation is not None:
            is_saturated = is_saturated | (raw >= saturation)
    return is_saturated


def _quantities(
    nets: PortNets, unit: str, cal: TapCalibration, is_saturated: BoolArray, *, is_declared: BoolArray | None
) -> tuple[dict[str, Any], dict[Quantity, ReasonArray]]:
    wanted, other, wanted_sigma, other_sigma = _by_wanted_port(nets, cal.wanted_port)
    ratio = extinction(wanted, other, wanted_sigma, other_sigma, nets.covariance)
    count, total = len(wanted), wanted + other
    shared = marked(count, (is_saturated, Reason.SATURATED), (~np.isfinite(nets.second), Reason.IMPOSSIBLE))
    power_reasons = shared.copy()
    scale_w = watts_per_unit(unit)
    if is_declared is None:
        shared |= marked(count, (~np.isfinite(nets.first), Reason.IMPOSSIBLE))
        power_reasons = shared.copy()
    elif is_declared.any():
        no_bright = np.isnan(nets.first)
        shared |= marked(count, (is_declared & ~no_bright, Reason.DECLARED_BRIGHT), (no_bright, Reason.NO_BRIGHT))
        power_reasons |= shared
    if np.isnan(scale_w):
        power_reasons |= np.uint32(Reason.NO_POWER_UNIT)
    er_reasons = ratio.reasons | shared
    if is_declared is not None and is_declared.any():
        missing = (er_reasons & np.uint32(Reason.NO_BRIGHT)) != 0
        er_reasons[missing] &= ~np.uint32(Reason.UNDEFINED)
    fields = {
        "wanted_power": wanted,
        "other_power": other,
        "power_w": total * scale_w,
        "er_db": ratio.er_db,
        "er_sigma_db": ratio.er_sigma_db,
        "is_lower_bound": ratio.is_lower_bound,
        "is_upper_bound": ratio.is_upper_bound,
        "angle_rad": angle_rad_from_er_db(ratio.er_db),
        "angle_is_upper_bound": ratio.is_lower_bound,
        "angle_is_lower_bound": ratio.is_upper_bound,
    }
    return fields, {Quantity.ER_DB: er_reasons, Quantity.ANGLE_DEG: er_reasons.copy(), Quantity.POWER_W: power_reasons}


def _by_wanted_port(nets: PortNets, wanted_port: Any) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    if np.ndim(wanted_port) == 0:
        first, second = (nets.first, nets.first_sigma), (nets.second, nets.second_sigma)
        (wanted, wanted_sigma), (other, other_sigma) = (second, first) if wanted_port == 2 else (first, second)
        return wanted, other, wanted_sigma, other_sigma
    is_second = np.asarray(wanted_port) == 2
    return (
        np.where(is_second, nets.second, nets.first),
        np.where(is_second, nets.first, nets.second),
        np.where(is_second, nets.second_sigma, nets.first_sigma),
        np.where(is_second, nets.first_sigma, nets.second_sigma),
    )
