"""Quantiles of a time of which some cases are only known to be longer."""

import numpy as np

from analysis.quantities import FloatArray


def time_quantile_s(reached_s: FloatArray, followed_s: FloatArray, probability: float) -> float:
    """Time by which a share of cases has reached something (product-limit estimate).

    Args:
        reached_s: Time at which each case reached it, s, shape (N,); NaN: not while it was followed (censored).
        followed_s: For how long each case was followed, s, shape (N,).
        probability: Share, in (0, 1).
    Returns:
        The earliest time by which the estimated share is at least ``probability``, s; inf where that was not seen; NaN for
        N = 0. Cases without an end count while they were followed: leaving them out would make times look short.
    Raises:
        ValueError: Shapes differ, or ``probability`` outside (0, 1).
    Source: docs/formulas.md, F-94.
    """
    if reached_s.shape != followed_s.shape or not 0.0 < probability < 1.0:
        raise ValueError(f"reached_s {reached_s.shape}, followed_s {followed_s.shape}, probability={probability!r}; "
                         "pass one pair of times per case and a share between 0 and 1.")
    if not len(reached_s):
        return float("nan")
    has_reached = np.isfinite(reached_s)
    time_s = np.where(has_reached, reached_s, followed_s)
    order = np.lexsort((~has_reached, time_s))
    at_risk = len(order) - np.arange(len(order))
    left = np.cumprod(1.0 - has_reached[order] / at_risk)
    met = np.flatnonzero(1.0 - left >= probability - 1e-12)
    return float(time_s[order][met[0]]) if len(met) else float("inf")
