"""Jones vectors and matrices of fully polarized light.

Convention: field phase exp(+i(wt - kz)), S3 = 2 Im(conj(Ex) Ey); S3 > 0 is right-handed in the optics naming. A
retarder's angle is that of its fast axis; its retardance is how much the slow component lags.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray

ComplexArray = NDArray[np.complex128]
FloatArray = NDArray[np.float64]


def jones_state(azimuth_rad: ArrayLike, ellipticity_rad: ArrayLike) -> ComplexArray:
    """Jones vector of unit power.

    Args:
        azimuth_rad, ellipticity_rad: Physical angles of the ellipse, rad, shape (...).
    Returns:
        (Ex, Ey), dimensionless, shape (..., 2).
    Source: E. Collett, Polarized Light in Fiber Optics (2003), from memory; re-derived.
    """
    psi, chi = np.broadcast_arrays(np.asarray(azimuth_rad, float), np.asarray(ellipticity_rad, float))
    cos_psi, sin_psi, cos_chi, sin_chi = np.cos(psi), np.sin(psi), np.cos(chi), np.sin(chi)
    return np.stack([cos_psi * cos_chi - 1j * sin_psi * sin_chi, sin_psi * cos_chi + 1j * cos_psi * sin_chi], axis=-1)


def stokes_of_jones(field: ComplexArray) -> FloatArray:
    """Stokes vector (S0, S1, S2, S3) of Jones vectors: shape (..., 2) in, (..., 4) out, power units of the field."""
    ex, ey = field[..., 0], field[..., 1]
    cross = np.conj(ex) * ey
    x_power, y_power = np.abs(ex) ** 2, np.abs(ey) ** 2
    return np.stack([x_power + y_power, x_power - y_power, 2.0 * cross.real, 2.0 * cross.imag], axis=-1)


def jones_rotator(angle_rad: ArrayLike) -> ComplexArray:
    """Matrix that turns the azimuth of light by +angle: shape (...) in rad, (..., 2, 2) out."""
    angle = np.asarray(angle_rad, float)
    cosine, sine = np.cos(angle), np.sin(angle)
    rows = [np.stack([cosine, -sine], axis=-1), np.stack([sine, cosine], axis=-1)]
    return np.stack(rows, axis=-2).astype(complex)


def jones_retarder(retardance_rad: ArrayLike, fast_azimuth_rad: ArrayLike) -> ComplexArray:
    """Matrix of a linear retarder.

    Args:
        retardance_rad: Lag of the slow component, rad, shape (...).
        fast_azimuth_rad: Azimuth of the fast axis, rad, shape (...).
    Returns:
        Unitary matrices, shape (..., 2, 2).
    Source: as ``jones_state``; with this field phase a lag is the factor exp(-i retardance).
    """
    delta, theta = np.broadcast_arrays(np.asarray(retardance_rad, float), np.asarray(fast_azimuth_rad, float))
    own = np.zeros((*delta.shape, 2, 2), complex)
    own[..., 0, 0] = np.exp(0.5j * delta)
    own[..., 1, 1] = np.exp(-0.5j * delta)
    return jones_rotator(theta) @ own @ jones_rotator(-theta)
