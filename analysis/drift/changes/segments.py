"""Changes of level found afterwards: pieces of constant mean, by least squares with a penalty per change."""

import math
from dataclasses import dataclass

import numpy as np

from analysis.drift.effective import variance_inflation
from analysis.quantities import FloatArray

_BAI_95 = 11.033


@dataclass(frozen=True, slots=True)
class SingleChange:
    """Best single change of the mean.

    Attributes:
        index: First reading of the new level. ``low_index``, ``high_index``: 95 % interval of it, for independent noise.
        before, after: Means of both sides. ``standard_error``: of their difference, widened by autocorrelation.
        squares: Sum of squares left.
    """

    index: int
    low_index: int
    high_index: int
    before: float
    after: float
    standard_error: float
    squares: float


def single_change(level: FloatArray) -> SingleChange:
    """Least squares over all places of one change (exact).

    Args:
        level: Means over equal spans in order, shape (N,), finite, N ≥ 3; a drift across a gap reads as a step.
    Returns:
        The best change, which exists in any noise: compare the step with its error (above 3.5 of it, for one place chosen among
        many). The interval is ±11.03 σ²/step² readings, σ² widened by autocorrelation. Source: docs/formulas.md, F-87.
    """
    level = _checked(level, 3)
    count = len(level)
    left = np.arange(1, count)
    total = np.cumsum(level - level.mean())
    gain = total[:-1] ** 2 * (1.0 / left + 1.0 / (count - left))
    index = int(np.argmax(gain)) + 1
    before, after = float(level[:index].mean()), float(level[index:].mean())
    residual = level - np.where(np.arange(count) < index, before, after)
    squares = float(residual @ residual)
    inflation = variance_inflation(np.arange(count), residual) if count >= 8 else 1.0
    variance = squares / max(count - 2, 1) * inflation
    step = after - before
    reach = math.ceil(_BAI_95 * variance / step**2) + 1 if step != 0.0 and variance / step**2 < count else count
    error = math.sqrt(variance * (1.0 / index + 1.0 / (count - index)))
    return SingleChange(index, max(index - reach, 1), min(index + reach, count - 1), before, after, error, squares)


def usual_penalty(level: FloatArray) -> float:
    """Squares that one more change must save: 2 σ² ln N (Bayesian information), σ² widened by autocorrelation.

    σ and the autocorrelation come from differences over one and two readings, which steps hardly touch.
    Source: docs/formulas.md, F-88.
    """
    level = _checked(level, 2)
    sigma = float(np.median(np.abs(np.diff(level)))) / (0.6744897501960817 * math.sqrt(2.0))
    if sigma == 0.0:
        sigma = float(np.std(np.diff(level))) / math.sqrt(2.0)
    wave = max(1.0, _difference_inflation(level))
    return 2.0 * sigma**2 * wave * math.log(len(level))


def segments(level: FloatArray, penalty: float | None = None, *, least: int = 2) -> list[int]:
    """First readings of all new levels, exact least squares with a penalty (optimal partitioning with pruning).

    Args:
        level: Means over equal spans in order, shape (N,), finite; N up to some thousands.
        penalty: Squares that one more change must save; None takes `usual_penalty`. ``least``: shortest piece, readings.
    Returns:
        Rising indices; empty where no change pays. Source: docs/formulas.md, F-88.
    """
    level = _checked(level, 1)
    if least < 1 or (penalty is not None and not penalty >= 0.0):
        raise ValueError(f"least={least!r} must be at least 1 and penalty={penalty!r} at least 0.")
    count = len(level)
    if count < 2 * least:
        return []
    penalty = usual_penalty(level) if penalty is None else penalty
    centred = level - level.mean()
    one, two = np.concatenate([[0.0], np.cumsum(centred)]), np.concatenate([[0.0], np.cumsum(centred**2)])
    best, last = np.full(count + 1, np.inf), np.zeros(count + 1, dtype=np.intp)
    best[0] = -penalty
    starts, doomed = np.array([0]), np.array([np.inf])
    for end in range(least, count + 1):
        if end >= 2 * least:
            starts, doomed = np.append(starts, end - least), np.append(doomed, np.inf)
        useful = doomed > end - least  # a start that lost at t can still be last until t + least, where t itself may be
        starts, doomed = starts[useful], doomed[useful]
        cost = best[starts] + two[end] - two[starts] - (one[end] - one[starts]) ** 2 / (end - starts)
        choice = int(np.argmin(cost))
        best[end], last[end] = cost[choice] + penalty, starts[choice]
        doomed = np.where(cost > best[end], np.minimum(doomed, end), doomed)
    found, end = [], count
    while last[end] > 0:
        end = int(last[end])
        found.append(end)
    return found[::-1]


def halved(level: FloatArray, penalty: float | None = None, *, least: int = 2) -> list[int]:
    """The same by binary segmentation: split while a split saves more than the penalty. Fast for any N, not always the best.

    Args, Returns: as `segments`. Source: docs/formulas.md, F-88.
    """
    level = _checked(level, 1)
    if len(level) < 2 * least:
        return []
    penalty = usual_penalty(level) if penalty is None else penalty
    total = np.concatenate([[0.0], np.cumsum(level - level.mean())])
    found, waiting = [], [(0, len(level))]
    while waiting:
        start, end = waiting.pop()
        if end - start < 2 * least:
            continue
        cut = np.arange(start + least, end - least + 1)
        mean = (total[end] - total[start]) / (end - start)
        apart = total[cut] - total[start] - mean * (cut - start)
        gain = apart**2 * (1.0 / (cut - start) + 1.0 / (end - cut))
        best = int(np.argmax(gain))
        if gain[best] > penalty:
            found.append(int(cut[best]))
            waiting += [(start, int(cut[best])), (int(cut[best]), end)]
    return sorted(found)


def _difference_inflation(level: FloatArray) -> float:
    """Long-run variance over half the variance of differences, of AR(1) noise: (1 + ρ)/(1 - ρ)².

    E(x_{i+1} - x_i)² = 2σ²(1 - ρ) and E(x_{i+2} - x_i)² = 2σ²(1 - ρ²), so their ratio, steps left out, is 1 + ρ.
    """
    if len(level) < 30:
        return 1.0
    rho = min(_trimmed_square(level[2:] - level[:-2]) / max(_trimmed_square(np.diff(level)), 1e-300) - 1.0, 0.95)
    return (1.0 + rho) / (1.0 - rho) ** 2 if rho > 0.0 else 1.0


def _trimmed_square(difference: FloatArray) -> float:
    """Mean square of what lies within 4 robust deviations; steps drop out."""
    reach = 4.0 * np.median(np.abs(difference)) / 0.6744897501960817
    kept = difference[np.abs(difference) <= reach]
    return float(kept @ kept / len(kept))


def _checked(level: FloatArray, fewest: int) -> FloatArray:
    level = np.asarray(level, np.float64)
    if level.ndim != 1 or len(level) < fewest or not np.all(np.isfinite(level)):
        raise ValueError(f"level of shape {level.shape} must hold {fewest} finite readings or more in a row; leave NaN out.")
    return level
