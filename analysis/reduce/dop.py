"""Degree of polarization: what motion and noise make of it. ER ceilings from it are in `analysis.reduce.ceiling`."""

from typing import Any

import numpy as np

from analysis.quantities import FloatArray


def dop_of_average(sop: Any) -> FloatArray:
    """Apparent DOP of light whose state moves while it is averaged: |mean of unit vectors|.

    Args:
        sop: Unit Stokes vectors, samples along the last axis but one, shape (..., N, 3); rows with a NaN are left out.
    Returns:
        Shape (...), in [0, 1]; two states an angle apart give cos(angle/2). NaN without samples. It says nothing of the
        light's own depolarization. Source: docs/formulas.md, F-40.
    """
    sop = np.asarray(sop, dtype=np.float64)
    good = np.isfinite(sop).all(axis=-1)
    total = np.where(good[..., None], sop, 0.0).sum(axis=-2)
    count = good.sum(axis=-1)
    return np.linalg.norm(total, axis=-1) / np.where(count > 0, count, np.nan)


def dop_with_sigma(stokes: Any, covariance: Any) -> tuple[FloatArray, FloatArray, FloatArray]:
    """DOP, its 1 sigma and how much noise lifts it, to first and second order.

    Args:
        stokes: (S0, S1, S2, S3), shape (..., 4); covariance: shape (..., 4, 4), unit squared.
    Returns:
        DOP |S|/S0 (not clipped; NaN where S0 is not above 0), its sigma, and the bias of its mean: noise across the vector
        only lengthens it, by (trace - along)/(2 |S| S0). Good while |S| is several sigma; NaN for |S| = 0.
    Source: docs/formulas.md, F-40.
    """
    stokes, covariance = np.asarray(stokes, dtype=np.float64), np.asarray(covariance, dtype=np.float64)
    total = np.where(stokes[..., 0] > 0.0, stokes[..., 0], np.nan)
    length = np.linalg.norm(stokes[..., 1:], axis=-1)
    unit = stokes[..., 1:] / np.where(length > 0.0, length, np.nan)[..., None]
    dop = length / total
    slope = np.concatenate([-(dop / total)[..., None], unit / total[..., None]], axis=-1)
    variance = np.einsum("...i,...ij,...j->...", slope, covariance, slope)
    block = covariance[..., 1:, 1:]
    across = np.trace(block, axis1=-2, axis2=-1) - np.einsum("...i,...ij,...j->...", unit, block, unit)
    return dop, np.sqrt(variance), across / (2.0 * np.where(length > 0.0, length, np.nan) * total)
