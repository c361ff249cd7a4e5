"""Straight-line regression whose errors allow for autocorrelation and unequal noise (HAC), with gaps respected."""

from dataclasses import dataclass

import numpy as np

from analysis.drift.effective import check_bins, newey_west_lags, pairs_at_lag
from analysis.quantities import FloatArray, IntArray


@dataclass(frozen=True, slots=True)
class Regression:
    """Least-squares fit of y = X b.

    Attributes:
        coefficient: b, shape (K,). ``covariance``: of b, HAC, shape (K, K). ``residual``: y - X b, shape (N,).
        lags: Lags used. ``r_squared``: explained share of the variance about the mean (X holds a constant).
    """

    coefficient: FloatArray
    covariance: FloatArray
    residual: FloatArray
    lags: int
    r_squared: float

    @property
    def standard_error(self) -> FloatArray:
        """Standard error of each coefficient, shape (K,)."""
        return np.sqrt(np.diag(self.covariance))


def regress(
    number: IntArray, design: FloatArray, level: FloatArray, *, lags: int | None = None, corrects_small_sample: bool = True
) -> Regression:
    """Ordinary least squares with Newey–West errors.

    Args:
        number: Number of each bin, shape (N,), strictly rising; products of residuals are taken between bins that lie so many
            numbers apart, never across a closed-up gap.
        design: X, shape (N, K), finite, of full rank. ``level``: y, shape (N,), finite.
        lags: Lags L, weights 1 - l/(L + 1); None takes floor(4 (N/100)^(2/9)). Some programs count L + 1 as *bandwidth*.
        corrects_small_sample: Multiply the covariance by N/(N - K).
    Raises:
        ValueError: Fewer than K + 1 rows, shapes that differ, or X not of full rank.
    Source: docs/formulas.md, F-71.
    """
    check_bins(number, level)
    count, terms = design.shape
    if count != len(level) or count <= terms:
        raise ValueError(f"design has shape {design.shape} for {len(level)} levels; pass more rows than its {terms} columns.")
    coefficient, _, rank, _ = np.linalg.lstsq(design, level, rcond=None)
    if rank < terms:
        raise ValueError(f"design has rank {rank}, not {terms}; leave out a column that follows from the others.")
    residual = level - design @ coefficient
    lags = newey_west_lags(count) if lags is None else lags
    middle = long_run_products(number, design * residual[:, None], lags)
    bread = np.linalg.inv(design.T @ design)
    covariance = bread @ middle @ bread * (count / (count - terms) if corrects_small_sample else 1.0)
    spread = level - level.mean()
    total = float(spread @ spread)
    return Regression(coefficient, covariance, residual, lags, 1.0 - float(residual @ residual) / total if total > 0.0 else 0.0)


def long_run_products(number: IntArray, score: FloatArray, lags: int) -> FloatArray:
    """G₀ + Σ (1 - l/(L+1)) (G_l + G_l'), G_l = Σ s_i s_j' over bins l numbers apart, shape (K, K). Source: F-71.

    A bin that is missing counts as a score of zero, which keeps the result free of negative variances.
    """
    total = score.T @ score
    for lag in range(1, min(lags, int(number[-1] - number[0])) + 1):
        early, late = pairs_at_lag(number, lag)
        product = score[late].T @ score[early]
        total += (1.0 - lag / (lags + 1.0)) * (product + product.T)
    return total
