"""Extinction ratio on an axis from the angles of the light. Angles are physical; the sphere's are twice as large."""

from typing import Any

import numpy as np

from analysis.quantities import FloatArray, angle_rad_from_er_db, er_db_from_angle_rad


def er_db_on_axis(azimuth_rad: Any, ellipticity_rad: Any, axis_azimuth_rad: Any, dop: Any = 1.0) -> FloatArray:
    """Port ER of light behind a linear analyser, dB: all light counts, also the unpolarized part.

    Args:
        azimuth_rad, ellipticity_rad: Of the light, rad, any shape; axis_azimuth_rad: of the wanted axis; dop: p in [0, 1].
    Returns:
        10 log10[(1 + p c)/(1 - p c)], c = cos 2chi cos 2(psi - psi0); +-inf where a port is exactly dark, NaN where the
        DOP is outside [0, 1] or an angle is NaN. Source: docs/formulas.md, F-13.
    """
    psi, chi, p = (np.asarray(x, dtype=np.float64) for x in (azimuth_rad, ellipticity_rad, dop))
    off_rad = psi - np.asarray(axis_azimuth_rad, dtype=np.float64)
    p = np.where((p >= 0.0) & (p <= 1.0), p, np.nan)
    # 1 - cos 2chi cos 2off without cancelling: 2 (sin^2 off + cos 2off sin^2 chi), and likewise for 1 + ...
    sine2, chi_sine2, double = np.sin(off_rad) ** 2, np.sin(chi) ** 2, np.cos(2.0 * off_rad)
    other = (1.0 - p) + 2.0 * p * (sine2 + double * chi_sine2)
    wanted = (1.0 - p) + 2.0 * p * (np.cos(off_rad) ** 2 - double * chi_sine2)
    with np.errstate(divide="ignore", invalid="ignore"):
        return 10.0 * (np.log10(np.maximum(wanted, 0.0)) - np.log10(np.maximum(other, 0.0)))


def er_db_from_misalignment(misalignment_rad: Any) -> FloatArray:
    """ER of linear light off the axis by an angle, dB: -20 log10 tan|theta|; inf at 0; any shape. Source: F-28."""
    return er_db_from_angle_rad(2.0 * _folded(misalignment_rad))


def misalignment_rad_from_er_db(er_db: Any) -> FloatArray:
    """Angle off the axis that linear light of an ER would have, rad in [0, pi/2]; any shape. Inverse of the above."""
    return 0.5 * angle_rad_from_er_db(er_db)


def er_db_from_ellipticity(ellipticity_rad: Any) -> FloatArray:
    """ER of fully polarized light whose major axis lies on the analyser, dB: -20 log10 tan|chi|.

    Args:
        ellipticity_rad: chi in [-pi/4, pi/4], rad, any shape; NaN outside. Source: docs/formulas.md, F-28.
    """
    chi = np.abs(np.asarray(ellipticity_rad, dtype=np.float64))
    return er_db_from_angle_rad(2.0 * np.where(chi <= np.pi / 4, chi, np.nan))


def ellipticity_rad_from_er_db(er_db: Any) -> FloatArray:
    """Size of the ellipticity behind an ER on the major axis, rad in [0, pi/4]; NaN for an ER below 0 dB; any shape."""
    er_db = np.asarray(er_db, dtype=np.float64)
    return 0.5 * angle_rad_from_er_db(np.where(er_db >= 0.0, er_db, np.nan))


def crosstalk_db(er_db: Any) -> FloatArray:
    """Share of the other port in *all* light, dB below it: ER + 10 log10(1 + 10^(-ER/10)); any shape.

    It is what tools mean that divide by the total: 0.04 dB above the ER at 20 dB, 3.01 dB at 0 dB. Source: F-28.
    """
    er_db = np.asarray(er_db, dtype=np.float64)
    return 10.0 / np.log(10.0) * np.logaddexp(er_db * np.log(10.0) / 10.0, 0.0)


def _folded(angle_rad: Any) -> FloatArray:
    """An axis' angle folded into [0, pi/2]."""
    turned = np.mod(np.abs(np.asarray(angle_rad, dtype=np.float64)), np.pi)
    return np.minimum(turned, np.pi - turned)
