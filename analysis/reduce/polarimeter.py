"""Calibration of a polarimeter of any make from known states: its matrix by pseudo-inverse, with covariance."""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from analysis.quantities import FloatArray
from analysis.reduce.scan import checked_condition

WORST_CONDITION: Final = 30.0


@dataclass(frozen=True, slots=True)
class PolarimeterCalibration:
    """A polarimeter of C channels.

    Attributes:
        instrument: readings = instrument @ Stokes, shape (C, 4).
        reduction: Stokes = reduction @ readings, shape (4, C): pseudo-inverse of ``instrument``.
        state_covariance: Inverse of the states' normal matrix, shape (4, 4): covariance of a row of ``instrument`` is this
            times the channel's variance.
        channel_sigma: 1 sigma of one reading of each channel, from the residuals, shape (C,); NaN for four states.
        state_condition, instrument_condition: 2-norm condition numbers. The best four states give sqrt(3) = 1.73.
    """

    instrument: FloatArray
    reduction: FloatArray
    state_covariance: FloatArray
    channel_sigma: FloatArray
    state_condition: float
    instrument_condition: float


def calibrate_polarimeter(
    states: Any, readings: Any, *, channel_sigma: Any = None, worst_condition: float = WORST_CONDITION
) -> PolarimeterCalibration:
    """Instrument matrix from readings of known light.

    Args:
        states: Known (S0, S1, S2, S3), shape (K, 4), K >= 4, not all in one plane of the sphere.
        readings: Of the C channels, behind their zeros, shape (K, C), C >= 4.
        channel_sigma: 1 sigma of one reading, one value or shape (C,); None: from the residuals (K > 4).
        worst_condition: Refuse states or channels that are worse conditioned.
    Returns:
        See `PolarimeterCalibration`: W^T = S^+ R. Source: docs/formulas.md, F-39.
    Raises:
        ValueError: Shapes do not fit, or states or channels cannot tell a Stokes part.
    """
    states, readings = np.asarray(states, dtype=np.float64), np.asarray(readings, dtype=np.float64)
    if states.ndim != 2 or readings.ndim != 2 or states.shape[1] != 4 or len(states) != len(readings):
        raise ValueError(f"states has shape {states.shape}, readings {readings.shape}; pass (K, 4) and (K, C).")
    state_condition = checked_condition(states, worst_condition)
    instrument = (np.linalg.pinv(states) @ readings).T
    instrument_condition = checked_condition(instrument, worst_condition)
    spare = len(states) - 4
    if channel_sigma is not None:
        sigma = np.broadcast_to(np.asarray(channel_sigma, dtype=np.float64), readings.shape[1]).copy()
    elif spare:
        sigma = np.linalg.norm(readings - states @ instrument.T, axis=0) / np.sqrt(spare)
    else:
        sigma = np.full(readings.shape[1], np.nan)
    return PolarimeterCalibration(
        instrument, np.linalg.pinv(instrument), np.linalg.inv(states.T @ states), sigma, state_condition, instrument_condition
    )


def stokes_of_readings(calibration: PolarimeterCalibration, readings: Any, *, sigma: Any = None) -> tuple[FloatArray, FloatArray]:
    """Stokes vectors and their covariance from a calibrated polarimeter's readings.

    Args:
        readings: Shape (..., C).
        sigma: 1 sigma of one reading, one value or shape (C,); None: the calibration's.
    Returns:
        Stokes, shape (..., 4), and covariance, shape (..., 4, 4): the readings' noise and the calibration's own
        uncertainty, which is common to all readings and does not average down. NaN gives NaN; DOP is not clipped.
    Source: docs/formulas.md, F-39.
    """
    readings = np.asarray(readings, dtype=np.float64)
    reduction = calibration.reduction
    stokes = np.einsum("pc,...c->...p", reduction, readings)
    noise = np.asarray(calibration.channel_sigma if sigma is None else sigma, dtype=np.float64)
    leverage = np.einsum("...p,pq,...q->...", stokes, calibration.state_covariance, stokes)
    variance = np.broadcast_to(noise, reduction.shape[1]) ** 2 + leverage[..., None] * calibration.channel_sigma**2
    return stokes, np.einsum("pc,...c,qc->...pq", reduction, variance, reduction)
