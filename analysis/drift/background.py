"""Red background of a periodogram, so that a line is judged by its neighbours in frequency."""

from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.quantities import FloatArray

LOWEST: Final = 6  # cycles per record
_LEAST_NEIGHBOURS = 24
_LN_MEDIAN = np.log(np.log(2.0))  # median of the logarithm of an exponential variable of mean 1


@dataclass(frozen=True, slots=True)
class RedBackground:
    """``level``: expected power without lines; ``chance``: of so high a peak anywhere in the range, both shape (F,).

    Below 6 cycles per record the chance is 1.
    """

    level: FloatArray
    chance: FloatArray


def red_background(power: FloatArray, oversampling: int) -> RedBackground:
    """Smooth background through medians of log power in widening bands, and the chance of each power over it.

    Args:
        power: At 1/(oversampling·T), 2/(oversampling·T), …, shape (F,), T the length of the record.
        oversampling: Grid points per 1/T.
    Returns:
        Bands are a third of an octave or more and hold at least 24 independent frequencies; between their centres log power
        runs straight over log frequency. A ratio x to the background has chance (1 + x/K)^{-K} at one frequency, K = half the
        independent frequencies of its band (the median's own error); the whole range counts 3 trials for each.
    Source: docs/formulas.md, F-80.
    """
    cycles = np.arange(1, len(power) + 1) / oversampling
    chance, level = np.ones(len(power)), np.full(len(power), np.nan)
    edges = _band_edges(float(cycles[-1]))
    if len(edges) < 2:
        return RedBackground(level, chance)
    logs = np.log(np.maximum(power, 1e-300))
    inside = [(cycles >= low) & (cycles < high) for low, high in zip(edges[:-1], edges[1:], strict=True)]
    centre = np.array([np.mean(np.log(cycles[band])) for band in inside])
    middle = np.array([np.median(logs[band]) for band in inside]) - _LN_MEDIAN
    freedom = 0.5 * np.diff(edges)
    searched = cycles >= LOWEST
    where = np.log(cycles[searched])
    level[searched] = np.exp(_straight(where, centre, middle))
    own = np.interp(where, centre, freedom)
    single = np.exp(-own * np.log1p(power[searched] / level[searched] / own))
    trials = 3.0 * (cycles[-1] - LOWEST)
    chance[searched] = -np.expm1(trials * np.log1p(-np.minimum(single, 1.0 - 1e-16)))
    return RedBackground(level, chance)


def _band_edges(highest: float) -> FloatArray:
    """Edges of the bands, cycles per record, from half of the lowest frequency searched."""
    edges = [0.5 * LOWEST]
    while True:
        step = max(edges[-1] * (2.0 ** (1.0 / 3.0) - 1.0), _LEAST_NEIGHBOURS)
        if edges[-1] + 1.5 * step > highest:
            break
        edges.append(edges[-1] + step)
    edges.append(np.nextafter(highest, np.inf))
    return np.array(edges)


def _straight(where: FloatArray, centre: FloatArray, middle: FloatArray) -> FloatArray:
    """Straight between the centres, and on beyond the first and the last."""
    inner = np.interp(where, centre, middle)
    if len(centre) < 2:
        return inner
    first = (middle[1] - middle[0]) / (centre[1] - centre[0])
    last = (middle[-1] - middle[-2]) / (centre[-1] - centre[-2])
    inner = np.where(where < centre[0], middle[0] + first * (where - centre[0]), inner)
    return np.where(where > centre[-1], middle[-1] + last * (where - centre[-1]), inner)
