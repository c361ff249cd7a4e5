"""Scans of a rotating plate or a rotating analyser to Stokes vectors, by weighted least squares.

A fixed analyser along x stands behind the plate; a plate's angle is that of its fast axis. Which sense of circular light
reads as S3 > 0 hangs on taking the fast and not the slow axis: fix it once with light of known handedness
(`analysis.reduce.plate`). Source: docs/formulas.md, F-35 to F-37.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from analysis.quantities import FloatArray

WORST_CONDITION: Final = 100.0


@dataclass(frozen=True, slots=True)
class ScanFit:
    """What a scan says.

    Attributes:
        stokes: Fitted parts, shape (..., P): S0 … S3 of a plate, S0 … S2 of an analyser; the intensities' unit.
        covariance: Shape (..., P, P), that unit squared; NaN where neither sigma nor spare readings are there.
        condition: 2-norm condition number of the measurement matrix: noise grows by up to this much.
        chi_square: Sum of squared residuals over sigma squared (over 1 without sigma), shape (...).
        spare: Readings less fitted parts.
    """

    stokes: FloatArray
    covariance: FloatArray
    condition: float
    chi_square: FloatArray
    spare: int


def plate_matrix(plate_rad: Any, retardance_rad: float, offset_rad: float = 0.0) -> FloatArray:
    """Measurement matrix of a rotating plate: intensities = matrix @ (S0, S1, S2, S3).

    Args:
        plate_rad: Scale readings, rad, shape (N,); the fast axis stands at reading - ``offset_rad``.
        retardance_rad: Lag of the slow component, rad.
    Returns:
        Shape (N, 4): 1/2 [1, (1 + cos d)/2 + (1 - cos d)/2 cos 4phi, (1 - cos d)/2 sin 4phi, -sin d sin 2phi].
    """
    fast_rad = np.asarray(plate_rad, dtype=np.float64) - offset_rad
    low, high = 0.5 * (1.0 + np.cos(retardance_rad)), 0.5 * (1.0 - np.cos(retardance_rad))
    columns = [
        np.ones_like(fast_rad),
        low + high * np.cos(4.0 * fast_rad),
        high * np.sin(4.0 * fast_rad),
        -np.sin(retardance_rad) * np.sin(2.0 * fast_rad),
    ]
    return 0.5 * np.stack(columns, axis=-1)


def analyser_matrix(analyser_rad: Any) -> FloatArray:
    """Measurement matrix of a rotating analyser: 1/2 [1, cos 2a, sin 2a], angles rad, shape (N,) in, (N, 3) out."""
    double = 2.0 * np.asarray(analyser_rad, dtype=np.float64)
    return 0.5 * np.stack([np.ones_like(double), np.cos(double), np.sin(double)], axis=-1)


def stokes_of_plate_scan(
    plate_rad: Any,
    intensity: Any,
    *,
    retardance_rad: float,
    offset_rad: float = 0.0,
    sigma: Any = None,
    worst_condition: float = WORST_CONDITION,
) -> ScanFit:
    """Stokes vectors of rotating-plate scans with any angles, retardance and offset.

    Args:
        plate_rad: Scale readings, rad, shape (N,), N >= 4.
        intensity: Behind the analyser, any linear unit, shape (..., N): many scans at the same angles at once.
        retardance_rad, offset_rad: Of the plate, rad.
        sigma: 1 sigma of the intensities, one value or shape (N,); None: equal and taken from the residuals.
        worst_condition: Refuse scans that are worse conditioned.
    Returns:
        See `ScanFit`; DOP is not clipped: above 1 it tells of a wrong retardance. NaN in a scan gives NaN.
    Raises:
        ValueError: Too few angles, or angles and retardance that cannot tell a Stokes part (steps of 45 degrees lose
            S2, a half-wave plate S3). Source: docs/formulas.md, F-35, F-37.
    """
    return _fit(plate_matrix(plate_rad, retardance_rad, offset_rad), intensity, sigma, worst_condition)


def stokes_of_analyser_scan(
    analyser_rad: Any, intensity: Any, *, sigma: Any = None, worst_condition: float = WORST_CONDITION
) -> ScanFit:
    """S0, S1, S2 of rotating-analyser scans; arguments and errors as `stokes_of_plate_scan`.

    It cannot see handedness, nor tell ellipticity from depolarization: there is no S3 and no DOP. Source: F-36, F-37.
    """
    return _fit(analyser_matrix(analyser_rad), intensity, sigma, worst_condition)


def plate_offset_rad(plate_rad: Any, intensity: Any) -> FloatArray:
    """Offset of the scale from one scan of light with S3, rad in (-pi/4, pi/4], known up to 90 degrees.

    Args:
        plate_rad: Scale readings, rad, shape (N,), N >= 5; intensity: shape (..., N).
    Returns:
        tan 2 offset = -B2c/B2s of the second harmonic, shape (...); NaN where that harmonic vanishes (no S3).
    """
    plate_rad = np.asarray(plate_rad, dtype=np.float64)
    parts = [np.ones_like(plate_rad)] + [f(k * plate_rad) for k in (2.0, 4.0) for f in (np.cos, np.sin)]
    found = _fit(np.stack(parts, axis=-1), intensity, None, WORST_CONDITION).stokes
    cosine, sine = found[..., 1], found[..., 2]
    lost = np.hypot(cosine, sine) <= 1e-12 * np.abs(found[..., 0])
    offset_rad = 0.5 * np.arctan2(-cosine * np.sign(sine), np.abs(sine))
    offset_rad = np.where(sine == 0.0, np.pi / 4, offset_rad)
    return np.where(lost, np.nan, offset_rad)


def stokes_seen_with_wrong_retardance(stokes: Any, retardance_rad: float) -> FloatArray:
    """What quarter-wave formulas make of light (..., 4) behind a plate of another retardance: the fault's fingerprint.

    S0 + S1 cos d, S1 (1 - cos d), S2 (1 - cos d), S3 sin d. Source: docs/formulas.md, F-35.
    """
    s0, s1, s2, s3 = np.moveaxis(np.asarray(stokes, dtype=np.float64), -1, 0)
    cosine = np.cos(retardance_rad)
    return np.stack([s0 + s1 * cosine, s1 * (1.0 - cosine), s2 * (1.0 - cosine), s3 * np.sin(retardance_rad)], axis=-1)


def _fit(matrix: FloatArray, intensity: Any, sigma: Any, worst_condition: float) -> ScanFit:
    intensity = np.asarray(intensity, dtype=np.float64)
    count, parts = matrix.shape
    if intensity.shape[-1:] != (count,):
        raise ValueError(f"intensity has shape {intensity.shape} for {count} angles; its last axis must run over the angles.")
    condition = checked_condition(matrix, worst_condition)
    known = np.ones(count) if sigma is None else np.broadcast_to(np.asarray(sigma, dtype=np.float64), count)
    if not (known > 0.0).all():
        raise ValueError("sigma is not above 0 everywhere; leave it out to take it from the residuals.")
    inverse = np.linalg.pinv(matrix / known[:, None]) / known
    stokes = np.einsum("pn,...n->...p", inverse, intensity)
    residual = (intensity - np.einsum("np,...p->...n", matrix, stokes)) / known
    chi_square, spare = np.sum(residual**2, axis=-1), count - parts
    covariance = np.broadcast_to((inverse * known**2) @ inverse.T, (*stokes.shape, parts))
    if sigma is None:
        covariance = covariance * (chi_square / spare if spare else np.full_like(chi_square, np.nan))[..., None, None]
    return ScanFit(stokes, covariance, condition, chi_square, spare)


def checked_condition(matrix: FloatArray, worst: float) -> float:
    """2-norm condition number of a measurement matrix, shape (N, P); raises ValueError naming the part it cannot tell."""
    count, parts = matrix.shape
    if count < parts:
        raise ValueError(f"{count} readings cannot give {parts} Stokes parts; take {parts} at least, better {parts + 4}.")
    _, values, vectors = np.linalg.svd(matrix)
    if not values[-1] * worst > values[0]:
        blind = int(np.argmax(np.abs(vectors[-1])))
        raise ValueError(
            f"These settings cannot tell S{blind} (condition number {values[0] / max(values[-1], 1e-300):.2g}, allowed "
            f"{worst:g}); choose angles that are not multiples of 45 degrees apart, and a retardance near 128 degrees."
        )
    return float(values[0] / values[-1])
