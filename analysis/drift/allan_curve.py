"""Overlapping and modified Allan deviation and time deviation of levels on an even grid, gaps respected.

A level (ER, angle, a Stokes component) is "frequency data": its running sum is the "phase" of the literature.
Source: docs/formulas.md, F-50 to F-52.
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.quantities import BoolArray, FloatArray, IntArray

_LOOKED_AT: Final = 1024
_PIECE: Final = 8192
_LOST_DIGITS: Final = 1e-4  # share of a difference of sums below which it is summed term by term instead


@dataclass(frozen=True, slots=True)
class AllanCurve:
    """Deviations at T averaging times.

    Attributes:
        factors: Averaging factors m, rising, shape (T,).
        tau_s: m times the interval, s, shape (T,).
        deviation: In the level's unit (time deviation: times s), shape (T,) or (T, C); NaN without a term.
        terms: Overlapping differences that each one rests on, shape (T,).
        modified: True for the modified deviation and the time deviation, whose confidence differs.
    """

    factors: IntArray
    tau_s: FloatArray
    deviation: FloatArray
    terms: IntArray
    modified: bool


def octaves(count: int) -> IntArray:
    """Averaging factors 1, 2, 4, … of which two in a row fit into ``count`` places."""
    return 2 ** np.arange(max(count // 2, 0).bit_length(), dtype=np.int64)


def overlapping_allan_deviation(
    level: FloatArray, interval_s: float, factors: IntArray | None = None, *, least_share: float = 1.0
) -> AllanCurve:
    """Overlapping Allan deviation: sqrt of half the mean square of all differences of adjacent means over m places.

    Args:
        level: The level itself (not its integral) on an even grid, any unit, shape (N,) or (N, C); NaN in a gap, in any
            component.
        interval_s: Spacing, s, above 0.
        factors: Averaging factors m, at least 1; octaves if left out.
        least_share: Share of the m places of a mean that must be filled, above 0, at most 1. With 1 a mean reaches over
            no gap; below it, a mean is taken over the filled places. Gaps are never closed up.
    Raises:
        ValueError: A shape, the interval, a factor or the share is out of range.
    Source: docs/formulas.md, F-50.
    """
    level, known, factors = _checked(level, interval_s, factors, least_share)
    sums = _plain_sums(level, factors) if known is None else _gapped_sums(level, known, factors, least_share)
    return _curve(level, interval_s, factors, sums, modified=False)


def modified_allan_deviation(
    level: FloatArray, interval_s: float, factors: IntArray | None = None, *, least_share: float = 1.0
) -> AllanCurve:
    """Modified Allan deviation: the differences of adjacent means are averaged over m places before squaring.

    Args, Raises: as `overlapping_allan_deviation`; ``least_share`` also holds for the differences averaged.
    Source: docs/formulas.md, F-51.
    """
    level, known, factors = _checked(level, interval_s, factors, least_share)
    if known is None and _are_octaves(factors):
        sums = _modified_octaves(level, factors)
    else:
        known = np.ones(len(level), dtype=bool) if known is None else known
        sums = [_modified_sum(level, known, int(m), least_share) for m in factors]
    return _curve(level, interval_s, factors, sums, modified=True)


def time_deviation(
    level: FloatArray, interval_s: float, factors: IntArray | None = None, *, least_share: float = 1.0
) -> AllanCurve:
    """Time deviation tau/sqrt(3) times the modified Allan deviation, in the level's unit times s. Source: F-52."""
    return as_time_deviation(modified_allan_deviation(level, interval_s, factors, least_share=least_share))


def as_time_deviation(curve: AllanCurve) -> AllanCurve:
    """A modified Allan deviation as time deviation.

    Raises:
        ValueError: The curve is not a modified one.
    """
    if not curve.modified:
        raise ValueError("the time deviation follows from the modified Allan deviation; give that one.")
    scale = curve.tau_s / math.sqrt(3.0)
    scaled = curve.deviation * scale.reshape(-1, *([1] * (curve.deviation.ndim - 1)))
    return AllanCurve(curve.factors, curve.tau_s, scaled, curve.terms, modified=True)


_Sum = tuple[FloatArray, int]


def _checked(
    level: FloatArray, interval_s: float, factors: IntArray | None, least_share: float
) -> tuple[FloatArray, BoolArray | None, IntArray]:
    """Level with its mean taken off and gaps as 0, shape (C, N); where it is known, None for everywhere; factors."""
    level = np.asarray(level, dtype=np.float64)
    if level.ndim not in (1, 2):
        raise ValueError(f"level has shape {level.shape}; pass (N,) or (N, C).")
    if not interval_s > 0.0:
        raise ValueError(f"interval_s={interval_s!r} must be above 0.")
    if not 0.0 < least_share <= 1.0:
        raise ValueError(f"least_share={least_share!r} must be above 0 and at most 1.")
    factors = octaves(len(level)) if factors is None else np.asarray(factors, dtype=np.int64)
    if (factors < 1).any():
        raise ValueError(f"factors={factors.tolist()} must be at least 1.")
    rows = np.ascontiguousarray(level.T) if level.ndim == 2 else level[None]
    mean = rows.mean(axis=1, keepdims=True) if rows.size else np.zeros((len(rows), 1))
    if np.isfinite(mean).all():
        return _shaped(rows - mean, level), None, factors
    known = np.isfinite(rows).all(axis=0)
    rows = np.where(known, rows, 0.0)
    mean = rows.sum(axis=1, keepdims=True) / max(int(known.sum()), 1)
    return _shaped(np.where(known, rows - mean, 0.0), level), known, factors


def _shaped(rows: FloatArray, level: FloatArray) -> FloatArray:
    """Own memory, component by component, in the level's shape."""
    return rows.T if level.ndim == 2 else rows[0]


def _components(level: FloatArray) -> FloatArray:
    return level.T if level.ndim == 2 else level[None]


def _curve(level: FloatArray, interval_s: float, factors: IntArray, sums: list[_Sum], *, modified: bool) -> AllanCurve:
    terms = np.array([count for _, count in sums], dtype=np.int64)
    squares = np.array([square for square, _ in sums]).reshape(len(factors), len(_components(level)))
    mean = np.where(terms[:, None] > 0, np.maximum(squares, 0.0) / np.maximum(terms[:, None], 1), np.nan)
    deviation = np.sqrt(0.5 * mean)
    return AllanCurve(factors, factors * interval_s, deviation if level.ndim == 2 else deviation[:, 0], terms, modified)


def _plain_sums(level: FloatArray, factors: IntArray) -> list[_Sum]:
    """Sums of squared differences without a gap, component by component."""
    counts = np.maximum(len(level) - 2 * factors + 1, 0)
    squares = np.array([_one_component(row, factors, counts) for row in _components(level)])
    return [(squares[:, place], int(count)) for place, count in enumerate(counts)]


def _one_component(row: FloatArray, factors: IntArray, counts: IntArray) -> FloatArray:
    """With W the sums over m places: sum (b - a)^2 = 2 sum a^2 + 2 sum b^2 - sum (a + b)^2, and a + b is the next W.

    So an octave costs one addition and one product per place. Where the result is small beside the sums (drift, random
    walk at small m), digits would be lost, and the differences are summed themselves. Octaves pass to and fro between two
    arrays: an addition in place would copy what overlaps.
    """
    found, spare = np.zeros(len(factors)), np.empty(len(row))
    window, width, square = row if _are_octaves(factors) else row.copy(), 1, _square(row)  # octaves need no second look
    for place, (m, count) in enumerate(zip(factors.tolist(), counts.tolist(), strict=True)):
        if not count:
            continue
        if width != m:
            window, width = _window_sums(row, m), m
            square = _square(window)
        head, tail, steps = window[:count], window[m : m + count], spare[:count]
        direct = None if _keeps_digits(window, m, count, square) else _square(np.subtract(tail, head, out=steps))
        ends = _square(window[:m]) + _square(window[count : count + m])
        doubled = _square(np.add(head, tail, out=steps))
        found[place] = (4.0 * square - 2.0 * ends - doubled if direct is None else direct) / (m * m)
        window, spare, width, square = steps, window, 2 * m, doubled
    return found


def _square(values: FloatArray) -> float:
    """Sum of squares, in pieces so short that BLAS stays on this thread: its threads wait for each other on a busy machine."""
    whole = len(values) // _PIECE
    pieces, rest = values[: whole * _PIECE].reshape(whole, _PIECE), values[whole * _PIECE :]
    return float(np.vecdot(pieces, pieces).sum() + np.dot(rest, rest))


def _squares_of_steps(window: FloatArray, m: int, count: int) -> float:
    return _square(window[m : m + count] - window[:count])


def _keeps_digits(window: FloatArray, m: int, count: int, square: float) -> bool:
    """Looked up on about a thousand differences: is their square no small share of the sums' own?"""
    every = max(1, count // _LOOKED_AT)
    step = window[m : m + count : every] - window[:count:every]
    return float(step @ step) * every > _LOST_DIGITS * 4.0 * square


def _window_sums(row: FloatArray, m: int) -> FloatArray:
    """Sums over m neighbouring places, shape (N - m + 1,)."""
    total = np.concatenate([[0.0], np.cumsum(row)])
    return total[m:] - total[:-m]


def _gapped_sums(level: FloatArray, known: BoolArray, factors: IntArray, least_share: float) -> list[_Sum]:
    reach = np.concatenate([[0], np.cumsum(known)])
    totals = [np.concatenate([[0.0], np.cumsum(row)]) for row in _components(level)]
    found: list[_Sum] = []
    for m in factors.tolist():
        if 2 * m > len(level):
            found.append((np.zeros(len(totals)), 0))
            continue
        usable, filled = _usable(reach, m, least_share)
        squares = [float(np.sum(_steps(total, filled, usable, m) ** 2)) for total in totals]
        found.append((np.array(squares), int(usable.sum())))
    return found


def _usable(reach: IntArray, m: int, least_share: float) -> tuple[BoolArray, IntArray]:
    """Which pairs of adjacent means count, shape (N - 2m + 1,), and the filled places of each mean, shape (N - m + 1,)."""
    filled = reach[m:] - reach[:-m]
    enough = filled >= math.ceil(least_share * m - 1e-9)
    return enough[m:] & enough[:-m], filled


def _steps(total: FloatArray, filled: IntArray, usable: BoolArray, m: int) -> FloatArray:
    """Differences of adjacent means, 0 where not usable."""
    means = (total[m:] - total[:-m]) / np.maximum(filled, 1)
    return np.where(usable, means[m:] - means[:-m], 0.0)


def _are_octaves(factors: IntArray) -> bool:
    return bool(len(factors) and np.array_equal(factors, 2 ** np.arange(len(factors), dtype=np.int64)))


def _modified_octaves(level: FloatArray, factors: IntArray) -> list[_Sum]:
    """With Z the sums over m of the sums over m places, a term is (Z later - Z)/m². Z doubles as Z + 2 Z later
    + Z later still."""
    counts = np.maximum(len(level) - 3 * factors + 2, 0)
    squares = np.zeros((len(factors), len(_components(level))))
    for component, row in enumerate(_components(level)):
        twice = row.copy()
        for place, (m, count) in enumerate(zip(factors.tolist(), counts.tolist(), strict=True)):
            if not count:
                break
            squares[place, component] = _squares_of_steps(twice, m, count) / float(m) ** 4
            after = len(twice) - 2 * m
            if after < 1:
                break
            twice[: after + m] += twice[m : after + 2 * m]  # once: Z + Z later
            twice = twice[: after + m]
            twice[:after] += twice[m : m + after]  # and again: Z + 2 Z later + Z later still
            twice = twice[:after]
    return [(squares[place], int(count)) for place, count in enumerate(counts)]


def _modified_sum(level: FloatArray, known: BoolArray, m: int, least_share: float) -> _Sum:
    rows = _components(level)
    if 3 * m - 1 > len(level):
        return np.zeros(len(rows)), 0
    usable, filled = _usable(np.concatenate([[0], np.cumsum(known)]), m, least_share)
    reach = np.concatenate([[0], np.cumsum(usable)])
    averaged = reach[m:] - reach[:-m]
    enough = averaged >= math.ceil(least_share * m - 1e-9)
    squares = np.zeros(len(rows))
    for place, row in enumerate(rows):
        step = _steps(np.concatenate([[0.0], np.cumsum(row)]), filled, usable, m)
        mean = _window_sums(step, m) / np.maximum(averaged, 1)
        squares[place] = float(np.sum(np.where(enough, mean, 0.0) ** 2))
    return squares, int(enough.sum())
