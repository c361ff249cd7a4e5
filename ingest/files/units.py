"""What a file's column may be mapped to, and how its unit becomes ours."""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
Conversion = Callable[[FloatArray], FloatArray]

POWER, TEMPERATURE, HUMIDITY, PRESSURE, ANGLE, FRACTION, CURRENT, COUNT, FLAG = (
    "power", "temperature", "humidity", "pressure", "angle", "fraction", "current", "count", "flag")

QUANTITY_OF: dict[str, str] = (
    dict.fromkeys([port + end for port in ("port1", "port2") for end in ("", "_min", "_max", "_sd")], POWER)
    | dict.fromkeys(["monitor", "s0", "s1", "s2", "s3", "power"], POWER)
    | dict.fromkeys(["azimuth_deg", "ellipticity_deg"], ANGLE)
    | {"dop": FRACTION, "averaged": COUNT, "clipped": FLAG, "temperature_c": TEMPERATURE,
       "humidity_pct": HUMIDITY, "pressure_hpa": PRESSURE, "drive_ma": CURRENT})

_WATTS = {"W": 1.0, "mW": 1e-3, "uW": 1e-6, "nW": 1e-9}
# Definitions, from memory: t/degC = T/K - 273.15 (SI brochure); 1 mbar = 1 hPa; degF = 1.8 degC + 32; 180 deg = pi rad.
_LINEAR: dict[str, dict[str, tuple[float, float]]] = {
    TEMPERATURE: {"degC": (1.0, 0.0), "K": (1.0, -273.15), "degF": (1 / 1.8, -32 / 1.8)},
    HUMIDITY: {"%": (1.0, 0.0), "1": (100.0, 0.0)},
    PRESSURE: {"hPa": (1.0, 0.0), "mbar": (1.0, 0.0), "Pa": (0.01, 0.0), "kPa": (10.0, 0.0)},
    ANGLE: {"deg": (1.0, 0.0), "rad": (180.0 / np.pi, 0.0)},
    FRACTION: {"1": (1.0, 0.0), "%": (0.01, 0.0)},
    CURRENT: {"mA": (1.0, 0.0), "A": (1000.0, 0.0)},
    COUNT: {"1": (1.0, 0.0)},
    FLAG: {"1": (1.0, 0.0)},
}


def units_for(column: str, tap_unit: str) -> list[str]:
    """Units a file may give ``column`` in, our own first; for powers they depend on the tap's unit."""
    quantity = QUANTITY_OF[column]
    if quantity != POWER:
        return list(_LINEAR[quantity])
    if tap_unit in _WATTS:
        others = [unit for unit in (*_WATTS, "dBm") if unit != tap_unit]
        return [tap_unit, *(unit for unit in others if unit != "dBm" or not is_difference(column))]
    return [tap_unit] if tap_unit else []


def is_difference(column: str) -> bool:
    """Whether the column may be negative by nature, so that a logarithmic unit makes no sense."""
    return column in {"s1", "s2", "s3"} or column.endswith("_sd")


def conversion(column: str, unit: str, tap_unit: str) -> Conversion:
    """How numbers of ``unit`` become our column's numbers.

    Raises:
        KeyError: ``unit`` is not among ``units_for(column, tap_unit)``.
    """
    if unit not in units_for(column, tap_unit):
        raise KeyError(unit)
    if QUANTITY_OF[column] != POWER:
        factor, offset = _LINEAR[QUANTITY_OF[column]][unit]
        return _line(factor, offset)
    if unit == "dBm" and tap_unit != "dBm":
        return lambda power_dbm: 1e-3 / _WATTS[tap_unit] * 10.0 ** (power_dbm / 10.0)
    if unit == tap_unit:
        return _line(1.0, 0.0)
    return _line(_WATTS[unit] / _WATTS[tap_unit], 0.0)


def _line(factor: float, offset: float) -> Conversion:
    if factor == 1.0 and offset == 0.0:
        return lambda number: number
    return lambda number: number * factor + offset
