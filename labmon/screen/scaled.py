"""Arrays to whole numbers for the browser: small on the wire, null for a gap, never NaN. Pure."""

from collections.abc import Sequence

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


def on_grid(at_us: NDArray[np.int64], columns: Sequence[FloatArray], bucket_us: int) -> tuple[int, list[FloatArray]]:
    """Buckets onto an even grid from the first to the last, NaN where there is none.

    Returns:
        The grid's start, µs, and the columns, each of the grid's length.
    """
    if len(at_us) == 0:
        return 0, [np.empty(0) for _ in columns]
    first_us = int(at_us[0])
    places = (np.asarray(at_us) - first_us) // bucket_us
    count = int(places[-1]) + 1
    grids = []
    for column in columns:
        grid = np.full(count, np.nan)
        grid[places] = column
        grids.append(grid)
    return first_us, grids


def gaps_of(is_known: NDArray[np.bool_], x0_ms: float, dx_ms: float) -> list[tuple[float, float]]:
    """Runs without value as (from, until), ms."""
    edges = np.flatnonzero(np.diff(np.concatenate(([True], is_known, [True])).astype(np.int8)))
    return [(x0_ms + start * dx_ms, x0_ms + end * dx_ms) for start, end in zip(edges[::2], edges[1::2], strict=True)]
