"""How much autocorrelated readings are worth: autocorrelation with gaps respected, and effective sample sizes."""

import numpy as np

from analysis.quantities import FloatArray, IntArray


def autocorrelation(number: IntArray, level: FloatArray, lags: int) -> FloatArray:
    """Autocorrelation of binned readings, from pairs of bins that both exist.

    Args:
        number: Number of each bin, shape (N,), strictly rising; a missing number is a gap.
        level: Its level, shape (N,), finite; the mean is taken off here.
        lags: Longest lag, bins.
    Returns:
        Shape (lags + 1,): r₀ = 1, r_k = Σ d_i d_{i+k} / Σ d², with the sum over pairs scaled up by the share of pairs that
        are missing; NaN where no pair has that lag or the level does not vary. Source: docs/formulas.md, F-70.
    """
    check_bins(number, level)
    found = np.full(lags + 1, np.nan)
    departure = level - np.mean(level) if len(level) else level
    square = float(departure @ departure)
    if square <= 0.0:
        return found
    found[0] = 1.0
    count = len(number)
    for lag in range(1, min(lags, count - 1) + 1):
        early, late = pairs_at_lag(number, lag)
        if len(early):
            found[lag] = (departure[early] @ departure[late]) / square * (count - lag) / len(early)
    return found


def pairs_at_lag(number: IntArray, lag: int) -> tuple[IntArray, IntArray]:
    """Positions (i, j) of all bins with number[j] = number[i] + lag; ``number`` rises strictly."""
    if number[-1] - number[0] == len(number) - 1:  # no gap
        early = np.arange(max(len(number) - lag, 0))
        return early, early + lag
    place = np.searchsorted(number, number + lag)
    early = np.flatnonzero((place < len(number)) & (number[np.minimum(place, len(number) - 1)] == number + lag))
    return early, place[early]


def mean_effective_size(count: int, rho: float) -> float:
    """Independent readings that fix a mean as well as ``count`` readings of an AR(1) series do; rho in (-1, 1).

    Exact: n / [1 + 2 Σ (1 - k/n) ρ^k]. Source: docs/formulas.md, F-70.
    """
    if not -1.0 < rho < 1.0:
        raise ValueError(f"rho={rho!r} must lie between -1 and 1; a walk has no mean.")
    lag = np.arange(1, count)
    return float(count / (1.0 + 2.0 * np.sum((1.0 - lag / count) * rho**lag)))


def correlation_effective_size(count: int, one: FloatArray, other: FloatArray) -> float:
    """Independent pairs that fix the correlation of two unrelated series as well as ``count`` pairs of these do.

    Args:
        count: Pairs of readings.
        one, other: Autocorrelations of the two series from lag 0, shape (L + 1,); NaN counts as 0.
    Returns:
        n / [1 + 2 Σ (1 - k/n) r_one(k) r_other(k)], at most ``count`` and at least 2; for two AR(1) series of many readings it is
        n (1 - r₁ r₂) / (1 + r₁ r₂). Source: docs/formulas.md, F-74.
    """
    product = np.nan_to_num(np.asarray(one, float)[1:] * np.asarray(other, float)[1:])
    lag = np.arange(1, len(product) + 1)
    inflation = 1.0 + 2.0 * float(np.sum((1.0 - lag / count) * product))
    return float(np.clip(count / max(inflation, 1.0), min(2.0, count), count))


def variance_inflation(number: IntArray, residual: FloatArray, fitted: int = 1) -> float:
    """Factor, at least 1, by which autocorrelation raises the variance of what is fitted to a series.

    Args:
        number, residual: As `autocorrelation`; residuals of a fit of ``fitted`` slowly varying terms (1: mean, 2: line).
    Returns:
        The larger of (1 + ρ)/(1 - ρ), ρ the lag-1 value freed of its small-sample bias, and the sum over Bartlett-weighted
        lags (which also sees slow waves); NaN below 8 bins. Source: docs/formulas.md, F-70.
    """
    count = len(number)
    if count < 8:
        return float("nan")
    reach = min(newey_west_lags(count) * 2, count // 4)
    r = np.nan_to_num(autocorrelation(number, residual, max(reach, 1)))
    rho = min(unbiased_lag1(r[1], count, fitted), 0.99)
    weight = 1.0 - np.arange(1, len(r)) / len(r)
    return max(1.0, (1.0 + rho) / (1.0 - rho), 1.0 + 2.0 * float(weight @ r[1:]))


def block_inflation(at_us: IntArray, residual: FloatArray, blocks: int = 1000) -> float:
    """The same for many readings at once: long-run variance of the residual per reading, over its variance.

    Args:
        at_us: Times, µs, shape (N,), sorted. ``residual``: of mean 0, shape (N,), finite.
        blocks: The span is cut into so many blocks of time; blocks without a reading stay gaps.
    Returns:
        At least 1; 1 where fewer than 8 blocks hold a reading. Source: docs/formulas.md, F-70.
    """
    square = float(residual @ residual)
    number = at_us // max((int(at_us[-1]) - int(at_us[0])) // blocks, 1)
    first = np.flatnonzero(np.diff(number, prepend=number[:1] - 1))
    if square <= 0.0 or len(first) < 8:
        return 1.0
    total = np.add.reduceat(residual, first)
    between = float(total @ total) / square
    return max(1.0, between * variance_inflation(number[first], total / np.diff(first, append=len(number))))


def unbiased_lag1(r1: float, count: int, fitted: int = 1) -> float:
    """Lag-1 value of an AR(1) series freed of the bias -(fitted + (fitted + 2) ρ)/n that fitting leaves. Source: F-70."""
    return (r1 * count + fitted) / (count - fitted - 2.0)


def newey_west_lags(count: int) -> int:
    """Usual number of lags, floor(4 (n/100)^(2/9)). Source: docs/formulas.md, F-71."""
    return int(4.0 * (count / 100.0) ** (2.0 / 9.0)) if count else 0


def check_bins(number: IntArray, level: FloatArray) -> None:
    """Refuse bins that do not rise, and levels of another length or not finite."""
    if np.shape(number) != np.shape(level):
        raise ValueError(f"number has shape {np.shape(number)}, level {np.shape(level)}; pass one level per bin.")
    if len(number) > 1 and not np.all(np.diff(number) > 0):
        raise ValueError("number must rise strictly; sort the readings and average those of one bin.")
    if not np.all(np.isfinite(level)):
        raise ValueError("level holds NaN or infinity; leave such readings out, a gap is respected.")
