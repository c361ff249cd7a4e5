"""Readings with times laid on an even grid, so that statistics of spacing can see gaps as gaps.

The rule for irregular spacing (docs/formulas.md, F-49): an empty place stays NaN, never filled, never closed up.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.drift.bins import bin_means
from analysis.quantities import US_PER_S, FloatArray, IntArray

_MOST_PLACES: Final = 50_000_000


@dataclass(frozen=True, slots=True)
class Grid:
    """Values on an even grid.

    Attributes:
        interval_s: Spacing, s.
        start_us: Time of the first place, µs: its centre for single readings, its start for means over bins.
        values: Shape (M,) or (M, C), NaN where no reading fell.
        averaged: Readings averaged in a filled place, the median count: 1 for single readings.
    """

    interval_s: float
    start_us: int
    values: FloatArray
    averaged: int = 1


def typical_interval_s(at_us: IntArray) -> float:
    """Median spacing of sorted times, s; NaN below two readings."""
    return float(np.median(np.diff(at_us))) / US_PER_S if len(at_us) > 1 else float("nan")


def on_grid(at_us: IntArray, values: FloatArray, interval_s: float) -> Grid:
    """Each reading at the nearest place of a grid in step with the readings themselves.

    For readings taken about every ``interval_s``: the grid's phase is the circular mean of the times' own, so that jitter
    of less than half an interval moves no reading. Readings that share a place are averaged.

    Args:
        at_us: Times, µs, sorted, shape (N,).
        values: Shape (N,) or (N, C). A NaN stays in its place, as a missing reading.
        interval_s: Spacing of the grid, s, above 0.
    Raises:
        ValueError: ``interval_s`` is not above 0, or the span holds over 50 million places.
    """
    interval_us = _interval_us(at_us, interval_s)
    if not len(at_us):
        return Grid(interval_us / US_PER_S, 0, np.asarray(values, dtype=np.float64))
    turn = 2.0 * np.pi / interval_us * ((at_us - at_us[0]) % interval_us)
    phase_us = round(float(np.arctan2(np.sin(turn).sum(), np.cos(turn).sum())) / (2.0 * np.pi) * interval_us)
    start_us = int(at_us[0]) + phase_us - interval_us // 2
    number, means = bin_means(at_us - start_us, values, interval_us)
    centre_us = start_us + interval_us // 2 + int(number[0]) * interval_us
    return Grid(interval_us / US_PER_S, centre_us, _spread_out(number, means))


def means_on_grid(at_us: IntArray, values: FloatArray, interval_s: float) -> Grid:
    """Mean of the readings in each bin; bins start at whole multiples of ``interval_s`` since 1970 UTC (F-19's rule).

    Args, Raises: as `on_grid`; rows with a NaN are left out.
    """
    interval_us = _interval_us(at_us, interval_s)
    values = np.asarray(values, dtype=np.float64)
    known = np.isfinite(values) if values.ndim == 1 else np.isfinite(values).all(axis=1)
    if not known.all():
        at_us, values = at_us[known], values[known]
    if not len(at_us):
        return Grid(interval_us / US_PER_S, 0, values)
    number, means = bin_means(at_us, values, interval_us)
    averaged = max(1, round(len(at_us) / len(number)))
    return Grid(interval_us / US_PER_S, int(number[0]) * interval_us, _spread_out(number, means), averaged)


def _interval_us(at_us: IntArray, interval_s: float) -> int:
    interval_us = round(interval_s * US_PER_S) if interval_s > 0.0 else 0
    if interval_us <= 0:
        raise ValueError(f"interval_s={interval_s!r} must be above 0.")
    if len(at_us) and (at_us[-1] - at_us[0]) // interval_us >= _MOST_PLACES:
        raise ValueError(f"interval_s={interval_s!r} cuts the span into over {_MOST_PLACES} places; take a longer one.")
    return interval_us


def _spread_out(number: IntArray, means: FloatArray) -> FloatArray:
    count = int(number[-1] - number[0]) + 1
    if count == len(number):
        return means
    values = np.full((count, *means.shape[1:]), np.nan)
    values[number - number[0]] = means
    return values
