"""Conversions between powers, decibels, leak and angles; array types.

Angles of the light are physical angles; an angle *on the sphere* is twice as large. Source of the relations:
docs/formulas.md, F-01 to F-04.
"""

import math
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

DB_PER_NEPER_OF_POWER: Final = 10.0 / math.log(10.0)  # 4.342945: dB for a relative change of 1
US_PER_S: Final = 1_000_000

_WATTS_PER_UNIT: Final = {"W": 1.0, "mW": 1e-3, "uW": 1e-6, "dBm": 1.0, "V": math.nan, "count": math.nan}


def watts_per_unit(unit: str) -> float:
    """Watts per linear unit of a tap that sends ``unit``; 1 for dBm (made linear first), NaN for V and count."""
    try:
        return _WATTS_PER_UNIT[unit]
    except KeyError:
        raise ValueError(f"unit={unit!r} is unknown; use one of {', '.join(_WATTS_PER_UNIT)}.") from None


def linear_from_raw(raw: FloatArray, unit: str) -> FloatArray:
    """Raw readings on a linear scale: W for dBm, else as sent; any shape."""
    return watts_from_dbm(raw) if unit == "dBm" else np.asarray(raw, dtype=np.float64)


def watts_from_dbm(power_dbm: Any) -> FloatArray:
    """Power, W, of a level in dBm (0 dBm is 1 mW). Source: F-01."""
    return 1e-3 * ratio_from_db(power_dbm)


def dbm_from_watts(power_w: Any) -> FloatArray:
    """Level, dBm, of a power in W; NaN at or below 0 W. Source: F-01."""
    return db_from_ratio(np.asarray(power_w, dtype=np.float64) * 1e3)


def db_from_ratio(ratio: Any) -> FloatArray:
    """10 log10 of a power ratio; NaN where the ratio is not above 0."""
    ratio = np.asarray(ratio, dtype=np.float64)
    return 10.0 * np.log10(np.where(ratio > 0.0, ratio, np.nan))


def ratio_from_db(level_db: Any) -> FloatArray:
    """Power ratio of a level in dB."""
    with np.errstate(over="ignore"):
        return np.power(10.0, np.asarray(level_db, dtype=np.float64) / 10.0)


def er_db_from_leak(leak: Any) -> FloatArray:
    """Extinction ratio, dB, of a leak r = other port / wanted port; NaN where r <= 0. Source: F-01."""
    return -db_from_ratio(leak)


def leak_from_er_db(er_db: Any) -> FloatArray:
    """Leak r = 10^(-ER/10)."""
    return ratio_from_db(-np.asarray(er_db, dtype=np.float64))


def angle_rad_from_er_db(er_db: Any) -> FloatArray:
    """Angle on the sphere from the wanted state, rad in [0, pi], of fully polarized light. Source: F-02.

    Negative ER gives angles above pi/2; 0 at +inf, pi at -inf; NaN for NaN.
    """
    with np.errstate(over="ignore"):
        return 2.0 * np.arctan(np.power(10.0, -np.asarray(er_db, dtype=np.float64) / 20.0))


def er_db_from_angle_rad(angle_rad: Any) -> FloatArray:
    """Extinction ratio, dB, of fully polarized light at an angle on the sphere, rad in [0, pi]; inf at 0. Source: F-02."""
    half_rad = 0.5 * np.asarray(angle_rad, dtype=np.float64)
    with np.errstate(divide="ignore"):
        return 20.0 * (np.log10(np.cos(half_rad)) - np.log10(np.sin(half_rad)))


def angle_between_rad(one: FloatArray, other: FloatArray) -> FloatArray:
    """Great-circle angle between vectors of shape (..., 3), rad in [0, pi]; lengths do not matter, NaN for a zero vector.

    Uses atan2(|a x b|, a.b), which is exact at both ends, where acos of the dot product is not. Source: F-03.
    """
    cross = np.linalg.norm(np.cross(one, other), axis=-1)
    dot = np.einsum("...i,...i->...", one, other)
    return np.where((cross == 0.0) & (dot == 0.0), np.nan, np.arctan2(cross, dot))


def sop_from_angles(azimuth_rad: Any, ellipticity_rad: Any) -> FloatArray:
    """Unit Stokes vectors, shape (..., 3), of azimuth and ellipticity, rad. Source: F-04."""
    azimuth_rad, ellipticity_rad = np.asarray(azimuth_rad, float), np.asarray(ellipticity_rad, float)
    equator = np.cos(2.0 * ellipticity_rad)
    parts = (equator * np.cos(2.0 * azimuth_rad), equator * np.sin(2.0 * azimuth_rad), np.sin(2.0 * ellipticity_rad))
    return np.stack(np.broadcast_arrays(*parts), axis=-1)
