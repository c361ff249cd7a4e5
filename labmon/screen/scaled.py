"""Arrays to whole numbers for the browser: small on the wire, null for a gap, never NaN. Pure."""

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
# What one whole number stands for: hundredths of a dB, of a degree, of a kelvin; DOP in ten-thousandths.
SCALES = {
    "er_db": 100,
    "angle_deg": 100,
    "dop": 10_000,
    "power_w": 100,
    "temperature_c": 100,
    "humidity_pct": 100,
    "pressure_hpa": 100,
}
LARGEST = 2**53 - 1


def whole_numbers(values: FloatArray, scale: float) -> list[int | None]:
    """``round(value * scale)``; what is not finite becomes None. Shape (N,) in, length N out."""
    with np.errstate(invalid="ignore", over="ignore"):
        scaled = np.rint(np.asarray(values, dtype=np.float64) * scale)
    is_known = np.isfinite(scaled) & (np.abs(scaled) <= LARGEST)
    filled = np.where(is_known, scaled, 0).astype(np.int64).tolist()
    return [number if known else None for number, known in zip(filled, is_known.tolist(), strict=True)]


def dbm_of(power_w: FloatArray) -> FloatArray:
    """Power as dBm: 10 log10(P / 1 mW), IEC 60027-3; NaN where there is no power above 0."""
    power = np.asarray(power_w, dtype=np.float64)
    return 10.0 * np.log10(np.where(power > 0, power, np.nan) * 1e3)


def gaps_of(is_known: NDArray[np.bool_], x0_ms: float, dx_ms: float) -> list[tuple[float, float]]:
    """Runs without value as (from, until), ms."""
    edges = np.flatnonzero(np.diff(np.concatenate(([True], is_known, [True])).astype(np.int8)))
    return [(x0_ms + start * dx_ms, x0_ms + end * dx_ms) for start, end in zip(edges[::2], edges[1::2], strict=True)]


def held(values: FloatArray, most: int) -> FloatArray:
    """Each value holds until the next, over at most ``most`` empty places; the rest of a gap stays NaN. Shape (N,)."""
    known = np.isfinite(values)
    if most <= 0 or known.all() or not known.any():
        return values
    places = np.arange(len(values))
    last = np.maximum.accumulate(np.where(known, places, -1))
    is_held = (last >= 0) & (places - last <= most)
    return np.where(is_held, values[np.maximum(last, 0)], np.nan)
