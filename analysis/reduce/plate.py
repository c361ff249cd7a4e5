"""Retardance and offset of a rotating plate from scans of known light."""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from scipy.optimize import least_squares

from analysis.quantities import FloatArray
from analysis.reduce.scan import plate_matrix

OFFSETS_TRIED: Final = 180
LEAST_CIRCULAR: Final = 0.05


@dataclass(frozen=True, slots=True)
class PlateCalibration:
    """A plate as the scans show it.

    Attributes:
        retardance_rad: In (0, pi); offset_rad: in (-pi/2, pi/2]: scale reading of the fast axis along x; gain: intensity
            unit per unit of the known states.
        covariance: Of (retardance, offset, gain), shape (3, 3), from the residuals.
        residual_sigma: Root mean square of the residuals, intensity unit, with the degrees of freedom.
    """

    retardance_rad: float
    offset_rad: float
    gain: float
    covariance: FloatArray
    residual_sigma: float


def calibrate_plate(plate_rad: Any, states: Any, intensity: Any) -> PlateCalibration:
    """Retardance, offset and gain from scans of states whose Stokes vectors are known.

    A slow axis taken for the fast one, and light of the other naming of handedness, look exactly alike: the sign of the
    known S3 decides, so one state must carry S3 (|S3| >= 0.05 S0) and its handedness must be right. Turned by mistake,
    the offset comes out 90 degrees off and every S3 measured later has the wrong sign, with nothing else to show it.

    Args:
        plate_rad: Scale readings, rad, shape (N,).
        states: Known (S0, S1, S2, S3) of each scan, optics convention, shape (K, 4).
        intensity: Shape (K, N), any linear unit.
    Returns:
        See `PlateCalibration`. Source: docs/formulas.md, F-38.
    Raises:
        ValueError: Shapes do not fit, no state carries S3 or S1 and S2, or a scan has a NaN.
    """
    plate_rad, states = np.asarray(plate_rad, dtype=np.float64), np.atleast_2d(np.asarray(states, dtype=np.float64))
    intensity = np.atleast_2d(np.asarray(intensity, dtype=np.float64))
    if intensity.shape != (len(states), plate_rad.size) or states.shape[-1] != 4:
        raise ValueError(f"intensity has shape {intensity.shape}; pass one row per state and one column per angle.")
    if not np.isfinite(intensity).all():
        raise ValueError("intensity has a NaN; leave its angle out of every scan.")
    if np.max(np.abs(states[:, 3]) / states[:, 0]) < LEAST_CIRCULAR:
        raise ValueError("No state has S3: fast and slow axis cannot be told apart. Add light of known handedness.")
    if np.max(np.hypot(states[:, 1], states[:, 2]) / states[:, 0]) < LEAST_CIRCULAR:
        raise ValueError("No state has S1 or S2: the retardance cannot be told from the gain. Add linear light.")

    def residuals(unknown: FloatArray) -> FloatArray:
        retardance_rad, offset_rad, gain = unknown
        return (gain * states @ plate_matrix(plate_rad, retardance_rad, offset_rad).T - intensity).ravel()

    scale = np.max(np.abs(intensity))
    start = _start(plate_rad, states, intensity)
    found = least_squares(residuals, start, xtol=1e-15, ftol=1e-15, gtol=1e-15, x_scale=(1.0, 1.0, scale))
    spare = intensity.size - 3
    variance = 2.0 * found.cost / spare if spare > 0 else np.nan
    covariance = variance * np.linalg.inv(found.jac.T @ found.jac)
    retardance_rad, offset_rad = _in_range(found.x[0], found.x[1])
    return PlateCalibration(retardance_rad, offset_rad, float(found.x[2]), covariance, float(np.sqrt(variance)))


def _start(plate_rad: FloatArray, states: FloatArray, intensity: FloatArray) -> FloatArray:
    """Best of a grid of offsets: with the offset held, gain, gain cos d and gain sin d come linearly."""
    best, start = np.inf, np.zeros(3)
    s0, s1, s2, s3 = (part[:, None] for part in states.T)
    for offset_rad in np.linspace(-np.pi / 2, np.pi / 2, OFFSETS_TRIED, endpoint=False):
        fast_rad = plate_rad - offset_rad
        turning = s1 * np.cos(4.0 * fast_rad) + s2 * np.sin(4.0 * fast_rad)
        parts = [s0 + 0.5 * (s1 + turning), 0.5 * (s1 - turning), -s3 * np.sin(2.0 * fast_rad)]
        design = 0.5 * np.stack([part.ravel() for part in np.broadcast_arrays(*parts)], axis=-1)
        (gain, cosine, sine), *_ = np.linalg.lstsq(design, intensity.ravel(), rcond=None)
        misfit = np.sum((design @ [gain, cosine, sine] - intensity.ravel()) ** 2)
        if sine >= 0.0 and misfit < best:
            best, start = misfit, np.array([np.arctan2(sine, cosine), offset_rad, gain])
    return start


def _in_range(retardance_rad: float, offset_rad: float) -> tuple[float, float]:
    """The same plate with retardance in (0, pi) and offset in (-pi/2, pi/2]; a retardance of -d is d turned by 90 degrees."""
    retardance_rad = float(np.mod(retardance_rad, 2.0 * np.pi))
    if retardance_rad > np.pi:
        retardance_rad, offset_rad = 2.0 * np.pi - retardance_rad, offset_rad + np.pi / 2
    return retardance_rad, float(np.pi / 2 - np.mod(np.pi / 2 - offset_rad, np.pi))
