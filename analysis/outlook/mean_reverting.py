"""First passage of an Ornstein–Uhlenbeck process dX = -θ (X - μ) dt + σ dW from below to a barrier.

The mean is Siegert's integral. The whole law comes from the process's generator on a grid: a chain of small steps up and
down that keeps the process's own balance, made symmetric and split into decaying modes, so that the chance not to have
arrived is a sum of exponentials, exact in time. Two grids are combined to remove the leading error of the steps.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.integrate import tanhsinh
from scipy.linalg import eigh_tridiagonal
from scipy.special import erfcx

from analysis.quantities import FloatArray

GRID = 200
REACH_SD = 7.0
"""The grid's lower end lies so far below that the process stands there e^(-7²/2) as often as at its start or mean."""
MOST_FALL = 18.0
"""From a start far above the mean, the grid ends where the potential has fallen so far: few (e^-18) return from there."""
MOST_PULL = 36.0
"""Beyond this fall of potential from start to barrier the modes cancel; the passage is then as good as a steady drift."""
RESOLVED = 1e-8
"""Chances below this are rounding of the modes; they read 0."""


def mean_passage_s(start: ArrayLike, barrier: ArrayLike, mean: ArrayLike, rate_per_s: ArrayLike, sd: ArrayLike) -> FloatArray:
    """Mean time to reach a barrier from below.

    Args:
        start, barrier, mean, sd: Start, barrier, mean μ and stationary standard deviation σ/√(2θ), one unit; broadcast.
        rate_per_s: θ, 1/s, above 0.
    Returns:
        s; 0 where start ≥ barrier; inf beyond what a double holds; NaN where an input is NaN, or θ or sd is not above 0.
    Source: docs/formulas.md, F-98.
    """
    start, barrier, mean, rate, sd = (np.asarray(part, np.float64) for part in (start, barrier, mean, rate_per_s, sd))
    scale = np.where((sd > 0.0) & (rate > 0.0), sd, np.nan) * np.sqrt(2.0)
    low, high = np.broadcast_arrays((start - mean) / scale, (barrier - mean) / scale)
    with np.errstate(over="ignore", invalid="ignore"):
        integral = tanhsinh(lambda u: erfcx(-u), np.minimum(low, high), high).integral
    integral = np.where(np.isnan(low + high), np.nan, np.where(high > 26.0, np.inf, integral))
    return np.sqrt(np.pi) / np.where(rate > 0.0, rate, np.nan) * np.where(low >= high, 0.0, integral)


@dataclass(frozen=True, slots=True, eq=False)
class RevertingPassage:
    """The law of the passage time: chance not to have arrived = Σ weight · exp(-decay · t), over both grids.

    Attributes:
        decay_per_s: Shape (2, GRID) and (2, …), 1/s. weight: Same shape, dimensionless.
    """

    decay_per_s: tuple[FloatArray, FloatArray]
    weight: tuple[FloatArray, FloatArray]

    def probability(self, time_s: ArrayLike) -> FloatArray:
        """Chance to have arrived by ``time_s`` (s, ≥ 0), in [0, 1]; 0 below ``RESOLVED``. Source: docs/formulas.md, F-99."""
        time_s = np.asarray(time_s, np.float64)
        coarse, fine = (np.exp(-time_s[..., None] * decay) @ weight for decay, weight in zip(self.decay_per_s, self.weight,
                                                                                             strict=True))
        chance = 1.0 - (4.0 * fine - coarse) / 3.0
        return np.where(chance < RESOLVED, 0.0, np.minimum(chance, 1.0))

    def quantile_s(self, probability: ArrayLike, *, horizon_s: float) -> FloatArray:
        """Time by which the barrier has been reached with a chance in (0, 1), s; inf beyond ``horizon_s``. Source: F-99."""
        wanted = np.asarray(probability, np.float64)
        low, high = np.zeros(wanted.shape), np.full(wanted.shape, float(horizon_s))
        is_beyond = self.probability(high) < wanted
        for _ in range(60):
            middle = 0.5 * (low + high)
            is_below = self.probability(middle) < wanted
            low, high = np.where(is_below, middle, low), np.where(is_below, high, middle)
        return np.where(is_beyond, np.inf, high)

    @property
    def mean_s(self) -> float:
        """Mean passage time by the modes, s; for comparison with `mean_passage_s`."""
        coarse, fine = (float(np.sum(weight / decay)) for decay, weight in zip(self.decay_per_s, self.weight, strict=True))
        return (4.0 * fine - coarse) / 3.0


def reverting_passage(start: float, barrier: float, mean: float, rate_per_s: float, sd: float) -> RevertingPassage:
    """Law of the time to reach a barrier from below; arguments as `mean_passage_s`, scalars, start < barrier.

    Raises:
        ValueError: An argument is not finite, start ≥ barrier, θ or sd is not above 0, or the mean draws too firmly to the
            barrier (`is_steady_pull`).
    Source: docs/formulas.md, F-99.
    """
    if not (np.isfinite([start, barrier, mean]).all() and start < barrier and 0.0 < rate_per_s < np.inf and 0.0 < sd < np.inf):
        raise ValueError(f"start={start!r}, barrier={barrier!r}, mean={mean!r}, rate_per_s={rate_per_s!r}, sd={sd!r}: "
                         "all must be finite, start below the barrier, rate and sd above 0.")
    if is_steady_pull(start, barrier, mean, sd):
        raise ValueError(f"start={start!r} is drawn to barrier={barrier!r} too firmly for modes; use the drifted walk with the "
                         "mean speed of the way.")
    grids = [_modes(start, barrier, mean, rate_per_s, sd, count) for count in (GRID, 2 * GRID)]
    return RevertingPassage((grids[0][0], grids[1][0]), (grids[0][1], grids[1][1]))


def is_steady_pull(start: float, barrier: float, mean: float, sd: float) -> bool:
    """The mean draws the process to the barrier so firmly that a drifted walk says the same (arguments as `mean_passage_s`)."""
    return 0.5 * (((start - mean) / sd) ** 2 - (max(mean - barrier, 0.0) / sd) ** 2) > MOST_PULL and start < mean


def _modes(start: float, barrier: float, mean: float, rate: float, sd: float, count: int) -> tuple[FloatArray, FloatArray]:
    """Decay rates, 1/s, and weights of the modes that start at ``start``, on ``count`` points below the barrier."""
    off = (start - mean) / sd
    deepest = np.sqrt(off**2 - 2.0 * MOST_FALL) if off > np.sqrt(2.0 * MOST_FALL) else -np.hypot(min(off, 0.0), REACH_SD)
    below = _points_below(barrier - start, barrier - mean - sd * deepest, count)
    potential = 0.5 * ((barrier - below - mean) / sd) ** 2
    gap = np.diff(below)
    width = 0.5 * (below[2:] - below[:-2])                      # of the points 1 … count - 1
    width = np.append(width, 0.5 * gap[-1])
    hop = rate * sd**2 / gap                                    # diffusion over the gap to the point nearer the barrier
    climb = 0.5 * np.diff(potential)                            # of the potential, away from the barrier
    towards = hop * np.exp(climb) / width
    away = hop[1:] * np.exp(-climb[1:]) / width[:-1]
    decay, modes = eigh_tridiagonal(towards + np.append(away, 0.0), -hop[1:] / np.sqrt(width[:-1] * width[1:]))
    balance = np.exp(-0.5 * (potential[1:] - potential[count // 2])) * np.sqrt(width)
    at_start = count // 2 - 1
    return np.maximum(decay, 0.0), modes[at_start] / np.sqrt(width[at_start]) * (balance @ modes)


def _points_below(to_start: float, whole: float, count: int) -> FloatArray:
    """Distances below the barrier, from 0 on, the start at half their number: dense at the barrier, wide far away."""
    half = np.arccosh(max(0.5 * whole / to_start, 1.0 + 1e-9))
    return to_start * np.sinh(2.0 * half * np.arange(count + 1) / count) / np.sinh(half)
