"""How long control charts run: average run lengths, and the limit for a wanted one.

All for independent Gaussian readings with known mean and standard deviation (the unit is that deviation); what
autocorrelation does to it, and a correction, is `cusum_run_length_ar1`.
"""

import math

import numpy as np
from scipy import optimize, stats

from analysis.quantities import FloatArray


def cusum_run_length(k: float, h: float, shift: float = 0.0, *, head_start: float = 0.0) -> float:
    """Average run length, readings, of the upper tabular CUSUM.

    Args:
        k, h: Slack (≥ 0) and limit (> 0), in standard deviations. ``shift``: of the mean, in standard deviations.
        head_start: First value of the sum, in [0, h].
    Returns:
        Zero-state ARL, from the integral equation L(u) = 1 + L(0) Φ(k - u - δ) + ∫₀ʰ L(x) φ(x + k - u - δ) dx by
        Gauss–Legendre quadrature. Source: docs/formulas.md, F-84.
    """
    _check(k, h)
    if not 0.0 <= head_start <= h:
        raise ValueError(f"head_start={head_start!r} must lie between 0 and h={h!r}.")
    node, weight = _quadrature(0.0, h, h)
    start = np.concatenate([[0.0], node])
    kernel = np.empty((len(start), len(start)))
    kernel[:, 0] = stats.norm.cdf(k - start - shift)
    kernel[:, 1:] = weight * stats.norm.pdf(node[None, :] + k - start[:, None] - shift)
    length = np.linalg.solve(np.eye(len(start)) - kernel, np.ones(len(start)))
    if head_start == 0.0:
        return float(length[0])
    row = weight * stats.norm.pdf(node + k - head_start - shift)
    return float(1.0 + length[0] * stats.norm.cdf(k - head_start - shift) + row @ length[1:])


def two_sided_cusum_run_length(k: float, h: float, shift: float = 0.0) -> float:
    """Average run length of both sums together, from 0: 1/L = 1/L⁺ + 1/L⁻, in control half of one side's. Source: F-84."""
    return 1.0 / (1.0 / cusum_run_length(k, h, shift) + 1.0 / cusum_run_length(k, h, -shift))


def cusum_limit(k: float, run_length: float) -> float:
    """Limit h, standard deviations, at which the two-sided CUSUM in control runs ``run_length`` readings on average.

    Raises:
        ValueError: ``run_length`` is not above that of h = 0.01 or beyond 10⁹. Source: docs/formulas.md, F-84.
    """
    low, high = 0.01, 2.0
    least = two_sided_cusum_run_length(k, low)
    if not least < run_length <= 1e9:
        raise ValueError(f"run_length={run_length!r} must lie between {least:.3g} and 1e9 readings at k={k!r}.")
    while two_sided_cusum_run_length(k, high) < run_length:
        high *= 1.5
    goal = math.log(run_length)
    return float(optimize.brentq(lambda h: math.log(two_sided_cusum_run_length(k, h)) - goal, low, high, xtol=1e-10))


def cusum_run_length_ar1(k: float, h: float, rho: float) -> float:
    """Run length in control of the two-sided CUSUM on AR(1) readings whose autocorrelation is not removed.

    Args:
        k, h: In standard deviations of the readings. ``rho``: lag-1 autocorrelation, in [0, 0.9].
    Returns:
        From a Markov chain of sum and reading on a lattice (24 cells of the sum), both sides joined as if independent; within a
        few per cent of simulation. Better run the chart on `prewhitened` readings. Source: docs/formulas.md, F-84.
    """
    _check(k, h)
    if not 0.0 <= rho <= 0.9:
        raise ValueError(f"rho={rho!r} must lie between 0 and 0.9; beyond, prewhiten the readings.")
    cells = 24
    cell = 2.0 * h / (2 * cells - 1)
    step = np.arange(math.ceil((-4.5 - k) / cell), math.floor((4.5 - k) / cell) + 1)
    reading = k + step * cell
    edge = np.concatenate([[-np.inf], 0.5 * (reading[1:] + reading[:-1]), [np.inf]])
    follow = np.diff(stats.norm.cdf((edge[None, :] - rho * reading[:, None]) / math.sqrt(1.0 - rho**2)), axis=1)
    after = np.maximum(np.arange(cells)[:, None] + step[None, :], 0)  # cell of the sum after each next reading
    chain = np.zeros((cells, len(step), cells + 1, len(step)))
    for sum_cell in range(cells):
        goes = np.minimum(after[sum_cell], cells)
        chain[sum_cell, :, goes, np.arange(len(step))] = follow.T
    inside = chain[:, :, :cells].reshape(cells * len(step), cells * len(step))
    length = np.linalg.solve(np.eye(len(inside)) - inside, np.ones(len(inside))).reshape(cells, len(step))
    first = np.diff(stats.norm.cdf(edge))
    goes = after[0]
    alive = goes < cells
    return 0.5 * float(1.0 + first[alive] @ length[goes[alive], np.flatnonzero(alive)])


def prewhitened(level: FloatArray, mean: float, rho: float) -> FloatArray:
    """Independent part of an AR(1) level, of the level's own variance: [d_i - ρ d_{i-1}]/√(1 - ρ²), the first as it is.

    Args:
        level: Evenly spaced, shape (N,); NaN stays NaN, and the reading after one is taken as it is.
        mean: Level in control. ``rho``: lag-1 autocorrelation, in (-1, 1).
    Returns:
        Shape (N,), about 0. A lasting shift shrinks to √((1 - ρ)/(1 + ρ)) of itself. Source: docs/formulas.md, F-84.
    """
    if not -1.0 < rho < 1.0:
        raise ValueError(f"rho={rho!r} must lie between -1 and 1.")
    departure = np.asarray(level, np.float64) - mean
    found = departure.copy()
    step = (departure[1:] - rho * departure[:-1]) / math.sqrt(1.0 - rho**2)
    found[1:] = np.where(np.isnan(departure[:-1]), departure[1:], step)
    return found


def ewma_run_length(weight: float, reach: float, shift: float = 0.0) -> float:
    """Zero-state average run length, readings, of the two-sided EWMA with its steady-state limits ±L √(λ/(2 - λ)).

    Args:
        weight: λ, in (0, 1]. ``reach``: L, above 0. ``shift``: of the mean, in standard deviations.
    Returns:
        From L(u) = 1 + (1/λ) ∫ L(x) φ((x - (1 - λ) u)/λ - δ) dx between the limits. Source: docs/formulas.md, F-85.
    """
    if not 0.0 < weight <= 1.0 or not reach > 0.0:
        raise ValueError(f"weight={weight!r} must lie in (0, 1] and reach={reach!r} above 0.")
    limit = reach * math.sqrt(weight / (2.0 - weight))
    node, share = _quadrature(-limit, limit, 2.0 * limit / weight)
    kernel = share / weight * stats.norm.pdf((node[None, :] - (1.0 - weight) * node[:, None]) / weight - shift)
    length = np.linalg.solve(np.eye(len(node)) - kernel, np.ones(len(node)))
    return float(1.0 + (share / weight * stats.norm.pdf(node / weight - shift)) @ length)


def ewma_reach(weight: float, run_length: float) -> float:
    """Reach L at which the EWMA in control runs ``run_length`` readings on average (above 2, at most 10⁹). Source: F-85."""
    if not 2.0 < run_length <= 1e9:
        raise ValueError(f"run_length={run_length!r} must lie between 2 and 1e9 readings.")
    goal = math.log(run_length)
    return float(optimize.brentq(lambda reach: math.log(ewma_run_length(weight, reach)) - goal, 0.05, 7.0, xtol=1e-10))


def _quadrature(low: float, high: float, widths: float) -> tuple[FloatArray, FloatArray]:
    """Gauss–Legendre nodes and weights; enough of them for a kernel that is 1/``widths`` of the range wide."""
    node, weight = np.polynomial.legendre.leggauss(int(min(48 + 6 * widths, 400)))
    return 0.5 * (high - low) * node + 0.5 * (high + low), 0.5 * (high - low) * weight


def _check(k: float, h: float) -> None:
    if not (k >= 0.0 and h > 0.0):
        raise ValueError(f"k={k!r} must be at least 0 and h={h!r} above 0, both in standard deviations.")
