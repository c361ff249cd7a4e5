"""Exact binomial bounds: what k failures in N windows say about the next one."""

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import betaincinv

from analysis.quantities import FloatArray

LEVEL = 0.95


def failure_bound(failed: ArrayLike, count: ArrayLike, *, level: float = LEVEL) -> FloatArray:
    """One-sided upper confidence bound on the chance of failure (Clopper–Pearson).

    Args:
        failed: Failures k, whole numbers, any shape. count: Trials N ≥ k, broadcast with it.
        level: Confidence, between 0 and 1.
    Returns:
        The bound, dimensionless in (0, 1]; 1 where nothing was tried (N = 0) or all failed. It covers at least ``level``.
    Raises:
        ValueError: k < 0, k > N, not whole, or ``level`` outside (0, 1).
    Source: docs/formulas.md, F-90.
    """
    failed, count = _counts(failed, count, level)
    return np.where(failed >= count, 1.0, betaincinv(failed + 1.0, np.maximum(count - failed, 1.0), level))


def proportion_interval(successes: ArrayLike, count: ArrayLike, *, level: float = LEVEL) -> tuple[FloatArray, FloatArray]:
    """Two-sided Clopper–Pearson interval of a share; [0, 1] for N = 0. Arguments as `failure_bound`. Source: F-90."""
    successes, count = _counts(successes, count, level)
    each = 0.5 + 0.5 * level
    high = failure_bound(successes, count, level=each)
    return 1.0 - failure_bound(count - successes, count, level=each), high


def failures_allowed(count: int, *, bound: float, level: float = LEVEL) -> int:
    """Most failures in ``count`` windows with `failure_bound` ≤ ``bound``; -1 where even none is too many. Source: F-90."""
    met = np.flatnonzero(failure_bound(np.arange(count + 1), count, level=level) <= bound)
    return int(met[-1]) if len(met) else -1


def windows_needed(failed: int, *, bound: float, level: float = LEVEL) -> int:
    """Smallest N at which ``failed`` failures still meet ``bound``: 14 for none at 20 %, 22 for one. Source: F-90."""
    if not 0.0 < bound < 1.0:
        raise ValueError(f"bound={bound!r} must lie between 0 and 1.")
    low, high = failed, 2 * failed + 2
    while failure_bound(failed, high, level=level) > bound:
        low, high = high, 2 * high
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if failure_bound(failed, middle, level=level) <= bound else (middle, high)
    return high


def _counts(k: ArrayLike, n: ArrayLike, level: float) -> tuple[FloatArray, FloatArray]:
    if not 0.0 < level < 1.0:
        raise ValueError(f"level={level!r} must lie between 0 and 1.")
    k, n = np.broadcast_arrays(np.asarray(k, dtype=np.float64), np.asarray(n, dtype=np.float64))
    if not np.all((k >= 0.0) & (k <= n) & (k == np.floor(k)) & (n == np.floor(n)) & np.isfinite(n)):
        raise ValueError(f"counts {k} of {n} are not whole numbers with 0 <= k <= N; pass counts, not shares.")
    return k, n
