"""Extinction ratio of two net powers, with floors: a value, a bound, or nothing."""

from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.special import log_ndtr, ndtri_exp

from analysis.quantities import DB_PER_NEPER_OF_POWER, BoolArray, FloatArray
from analysis.reduce.trust import Reason, ReasonArray, marked

DETECTION_SIGMA: Final = 1.6448536269514722  # Currie's decision threshold at 5 %, F-06
DARK_SIGMA: Final = 3.0
NEGATIVE_SIGMA: Final = 5.0
CONFIDENCE: Final = 0.95


@dataclass(frozen=True, slots=True)
class Extinction:
    """Extinction ratio of N samples, shapes (N,); see `extinction`."""

    er_db: FloatArray
    er_sigma_db: FloatArray
    is_lower_bound: BoolArray
    is_upper_bound: BoolArray
    reasons: ReasonArray


def upper_limit(net: FloatArray, sigma: FloatArray, confidence: float = CONFIDENCE) -> FloatArray:
    """One-sided upper limit of a power that cannot be negative, from a net reading with Gaussian noise.

    Args:
        net, sigma: Net reading and its 1 sigma (above 0), same unit, any shape.
        confidence: 1 - alpha, in (0, 1).
    Returns:
        x + sigma PhiInv(1 - alpha Phi(x/sigma)), always above 0; NaN for NaN. Source: F-06.
    Raises:
        ValueError: ``confidence`` is not between 0 and 1.
    """
    if not 0.0 < confidence < 1.0:
        raise ValueError(f"confidence={confidence!r} is not between 0 and 1; 0.95 is usual.")
    score = net / sigma
    # PhiInv(1 - p) = -PhiInv(p); in logarithms, so that it holds for readings far below zero.
    return net - sigma * ndtri_exp(np.log1p(-confidence) + log_ndtr(score))


def extinction(
    wanted: FloatArray,
    other: FloatArray,
    wanted_sigma: FloatArray,
    other_sigma: FloatArray,
    covariance: FloatArray | float = 0.0,
    *,
    confidence: float = CONFIDENCE,
) -> Extinction:
    """Extinction ratio of two net powers.

    A port below 1.645 sigma is not detected: the ratio is then a one-sided bound at ``confidence``. Both ports within 3 sigma of
    zero are dark: no ratio. A net at or below zero without a known floor, or more than 5 sigma below zero, is negative:
    no ratio.

    Args:
        wanted, other: Signed net powers, one unit, shape (N,).
        wanted_sigma, other_sigma: Their 1 sigma, broadcastable, 0 where unknown.
        covariance: Of the two nets, where they share a reading (leaky splitter).
        confidence: Of a bound, in (0, 1); the threshold of detection stays at 1.645 sigma.
    Returns:
        ``er_db`` dB, NaN where undefined; ``er_sigma_db`` dB, NaN for bounds and where no noise is known; reasons.
    Source: docs/formulas.md, F-01, F-05, F-06, F-07.
    """
    count = len(wanted)
    wanted_sigma, other_sigma = np.broadcast_to(wanted_sigma, count), np.broadcast_to(other_sigma, count)
    finite = np.isfinite(wanted) & np.isfinite(other)
    is_dark = (np.abs(wanted) <= DARK_SIGMA * wanted_sigma) & (np.abs(other) <= DARK_SIGMA * other_sigma)
    sees_wanted = finite & (wanted > 0.0) & (wanted >= DETECTION_SIGMA * wanted_sigma)
    sees_other = finite & (other > 0.0) & (other >= DETECTION_SIGMA * other_sigma)
    is_lower = sees_wanted & ~sees_other & (other_sigma > 0.0) & (other >= -NEGATIVE_SIGMA * other_sigma) & ~is_dark
    is_upper = sees_other & ~sees_wanted & (wanted_sigma > 0.0) & (wanted >= -NEGATIVE_SIGMA * wanted_sigma) & ~is_dark
    is_value = sees_wanted & sees_other & ~is_dark
    top, bottom = wanted.copy(), other.copy()
    if is_lower.any():
        bottom[is_lower] = upper_limit(other[is_lower], other_sigma[is_lower], confidence)
    if is_upper.any():
        top[is_upper] = upper_limit(wanted[is_upper], wanted_sigma[is_upper], confidence)
    has_ratio = is_value | is_lower | is_upper
    all_have = bool(has_ratio.all())
    if not all_have:
        top[~has_ratio] = bottom[~has_ratio] = np.nan
    er_db = 10.0 * np.log10(top / bottom)
    reasons = marked(
        count,
        (is_lower | is_upper, Reason.FLOOR),
        (is_dark, Reason.DARK),
        (~has_ratio & ~is_dark & finite, Reason.NEGATIVE),
        (~finite, Reason.UNDEFINED),
    )
    return Extinction(
        er_db, _sigma_db(wanted, other, wanted_sigma, other_sigma, covariance, is_value), is_lower, is_upper, reasons
    )


def _sigma_db(
    wanted: FloatArray,
    other: FloatArray,
    wanted_sigma: FloatArray,
    other_sigma: FloatArray,
    covariance: FloatArray | float,
    is_value: BoolArray,
) -> FloatArray:
    """First-order uncertainty of the decibel ratio (F-05), dB; NaN where there is no value or no known noise."""
    is_known = is_value & ((wanted_sigma > 0.0) | (other_sigma > 0.0))
    if not is_known.any():
        return np.full(len(wanted), np.nan)
    safe_wanted, safe_other = np.where(is_known, wanted, np.nan), np.where(is_known, other, np.nan)
    variance = (wanted_sigma / safe_wanted) ** 2 + (other_sigma / safe_other) ** 2 - 2.0 * covariance / (safe_wanted * safe_other)
    return DB_PER_NEPER_OF_POWER * np.sqrt(np.maximum(variance, 0.0))
