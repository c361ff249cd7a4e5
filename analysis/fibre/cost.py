"""What a polarization error costs its user, and the limit that a wanted quality sets.

The error is the angle on the sphere between the state that is and the state that is wanted, rad in [0, pi]; for an ER
pass ``angle_rad_from_er_db``. Forward functions take any shape and keep NaN; inverse ones give a `Limit`.
Source: docs/formulas.md, F-41 to F-44.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import jv

from analysis.quantities import FloatArray, er_db_from_angle_rad


@dataclass(frozen=True, slots=True)
class Limit:
    """The largest allowed angle on the sphere, and the ER that is the same thing for fully polarized light."""

    angle_rad: FloatArray

    @property
    def angle_deg(self) -> FloatArray:
        """Degrees on the sphere."""
        return np.degrees(self.angle_rad)

    @property
    def er_db(self) -> FloatArray:
        """Lowest allowed ER, dB; inf where no error at all is allowed."""
        return er_db_from_angle_rad(self.angle_rad)


def orthogonal_share(angle_rad: Any) -> FloatArray:
    """Share of the power in the state orthogonal to the wanted one: sin^2(angle/2), in [0, 1]. Source: F-41."""
    return np.sin(0.5 * np.asarray(angle_rad, dtype=np.float64)) ** 2


def limit_from_orthogonal_share(share: Any) -> Limit:
    """Limit that keeps the orthogonal power at or below a share of all, in [0, 1]."""
    return Limit(2.0 * np.arcsin(np.sqrt(_within("share", share, 0.0, 1.0))))


def fringe_visibility(angle_rad: Any, power_ratio: Any = 1.0) -> FloatArray:
    """Visibility of two-beam fringes whose arms' states are an angle apart.

    Args:
        angle_rad: Between the two arms' states, rad.
        power_ratio: Power of one arm / of the other, above 0; 1 for equal arms.
    Returns:
        cos(angle/2) 2 sqrt(q)/(1 + q), in [0, 1]. Source: F-42. It is not the `projective_contrast`.
    """
    return _arms_visibility(power_ratio) * np.cos(0.5 * np.asarray(angle_rad, dtype=np.float64))


def limit_from_fringe_visibility(visibility: Any, power_ratio: Any = 1.0) -> Limit:
    """Limit that keeps the fringe visibility at or above a value, in [0, 1].

    Raises:
        ValueError: Unequal arms cannot reach the visibility even with equal states.
    """
    share = _within("visibility", visibility, 0.0, 1.0) / _arms_visibility(power_ratio)
    if (share > 1.0).any():
        highest = np.min(_arms_visibility(power_ratio))
        raise ValueError(f"visibility={visibility!r} is above the {highest:.4g} of arms so unequal; balance their powers first.")
    return Limit(2.0 * np.arccos(share))


def projective_contrast(angle_rad: Any) -> FloatArray:
    """Contrast (P - P_orthogonal)/(P + P_orthogonal) behind an analyser on the wanted state: cos(angle), in [-1, 1].

    Quantum optics calls this visibility too. Source: F-41.
    """
    return np.cos(np.asarray(angle_rad, dtype=np.float64))


def limit_from_projective_contrast(contrast: Any) -> Limit:
    """Limit that keeps the projective contrast at or above a value, in [-1, 1]."""
    return Limit(np.arccos(_within("contrast", contrast, -1.0, 1.0)))


def polarization_qber(angle_rad: Any) -> FloatArray:
    """Error rate that polarization alone causes in a basis on the wanted state: (1 - cos angle)/2 = 1/(1 + 10^(ER/10)).

    Dark counts, multiphoton pulses and the other basis come on top. Source: F-41.
    """
    return orthogonal_share(angle_rad)


def limit_from_qber(qber: Any) -> Limit:
    """Limit that keeps the polarization-caused error rate at or below a value, in [0, 1]."""
    return Limit(2.0 * np.arcsin(np.sqrt(_within("qber", qber, 0.0, 1.0))))


def unmodulated_share(angle_rad: Any) -> FloatArray:
    """Share of the light that a modulator of one axis does not modulate: the orthogonal share.

    It is the floor under an intensity modulator's extinction and the residual carrier of a suppressed one. Source: F-44.
    """
    return orthogonal_share(angle_rad)


def limit_from_unmodulated_share(share: Any) -> Limit:
    """Limit that keeps the unmodulated light at or below a share, in [0, 1]."""
    return limit_from_orthogonal_share(share)


def residual_amplitude_modulation(
    angle_rad: Any, analyser_off_rad: Any, depth_rad: Any, phase_rad: Any = np.pi / 2
) -> FloatArray:
    """Intensity modulation at the drive frequency that a phase modulator makes of misaligned light before an analyser.

    Args:
        angle_rad: On the sphere, between the linear light and the modulator's axis (twice the physical angle), rad.
        analyser_off_rad: Physical angle between the analyser (or any polarizing path) and that axis, rad.
        depth_rad: Modulation depth between the two axes, M, rad.
        phase_rad: Static phase between the axes, rad; the default is the worst, and temperature moves it.
    Returns:
        Amplitude / mean intensity, not below 0: |sin 2a sin 2b J1(M) sin phase| / mean, with a = angle/2.
        Source: docs/formulas.md, F-43.
    """
    alpha, beta = 0.5 * np.asarray(angle_rad, dtype=np.float64), np.asarray(analyser_off_rad, dtype=np.float64)
    both = np.sin(2.0 * alpha) * np.sin(2.0 * beta)
    mean = (np.cos(alpha) * np.cos(beta)) ** 2 + (np.sin(alpha) * np.sin(beta)) ** 2
    mean = mean + 0.5 * both * jv(0, depth_rad) * np.cos(phase_rad)
    return np.abs(both * jv(1, depth_rad) * np.sin(phase_rad)) / np.where(mean > 0.0, mean, np.nan)


def limit_from_residual_amplitude_modulation(residual: Any, analyser_off_rad: Any, depth_rad: Any) -> Limit:
    """Limit that keeps that residual at or below a value at the worst static phase (90 degrees).

    Returns:
        The smallest angle A that reaches it, from 2 |sin 2b J1(M)| sin A = residual (1 + cos A cos 2b), so that all
        smaller ones stay below; pi where no angle reaches it. Source: docs/formulas.md, F-43.
    Raises:
        ValueError: ``residual`` is below 0.
    """
    wanted = _within("residual", residual, 0.0, np.inf)
    double = 2.0 * np.asarray(analyser_off_rad, dtype=np.float64)
    height = 2.0 * np.abs(np.sin(double) * jv(1, depth_rad))
    # mean = (1 + cos A cos 2b)/2, so: height sin A - wanted cos 2b cos A = wanted
    tilt = np.arctan2(wanted * np.cos(double), height)
    size = np.hypot(height, wanted * np.cos(double))
    reached = wanted < size
    angle_rad = np.arcsin(np.where(reached, wanted / np.where(size > 0.0, size, 1.0), 0.0)) + tilt
    return Limit(np.where(reached, angle_rad, np.pi))


def _arms_visibility(power_ratio: Any) -> FloatArray:
    ratio = np.asarray(power_ratio, dtype=np.float64)
    if (ratio <= 0.0).any():
        raise ValueError("power_ratio must be above 0; give the power of one arm over that of the other.")
    return 2.0 * np.sqrt(ratio) / (1.0 + ratio)


def _within(name: str, value: Any, low: float, high: float) -> FloatArray:
    value = np.asarray(value, dtype=np.float64)
    if ((value < low) | (value > high)).any():
        raise ValueError(f"{name} must lie between {low:g} and {high:g}; it is a ratio, not per cent.")
    return value
