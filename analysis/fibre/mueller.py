"""Mueller matrices; retarders are rotations of the Poincaré sphere."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from analysis.fibre.jones import ComplexArray, stokes_of_jones

FloatArray = NDArray[np.float64]


def _matrix(rows: list[list[ArrayLike]]) -> FloatArray:
    """Stack equal-shaped entries (...) into matrices (..., 4, 4)."""
    entries = np.broadcast_arrays(*[np.asarray(entry, float) for row in rows for entry in row])
    return np.stack(entries, axis=-1).reshape(*entries[0].shape, 4, 4)


def mueller_retarder(retardance_rad: ArrayLike, fast_azimuth_rad: ArrayLike) -> FloatArray:
    """Mueller matrix of a linear retarder.

    Args:
        retardance_rad: Lag of the slow component, rad, shape (...).
        fast_azimuth_rad: Azimuth of the fast axis, rad, shape (...).
    Returns:
        Shape (..., 4, 4). On the sphere it turns s by -retardance about (cos 2θ, sin 2θ, 0).
    Source: D. Goldstein, Polarized Light (2nd ed. 2003), from memory; checked against Jones algebra and py_pol.
    """
    delta, theta = np.asarray(retardance_rad, float), np.asarray(fast_azimuth_rad, float)
    c, s, cosine, sine = np.cos(2 * theta), np.sin(2 * theta), np.cos(delta), np.sin(delta)
    return _matrix([[1, 0, 0, 0],
                    [0, c**2 + s**2 * cosine, s * c * (1 - cosine), -s * sine],
                    [0, s * c * (1 - cosine), s**2 + c**2 * cosine, c * sine],
                    [0, s * sine, -c * sine, cosine]])


def mueller_polarizer(azimuth_rad: ArrayLike) -> FloatArray:
    """Mueller matrix of an ideal linear polarizer: rad, shape (...) in, (..., 4, 4) out. Source: as the retarder."""
    theta = np.asarray(azimuth_rad, float)
    c, s = np.cos(2 * theta), np.sin(2 * theta)
    return 0.5 * _matrix([[1, c, s, 0], [c, c**2, s * c, 0], [s, s * c, s**2, 0], [0, 0, 0, 0]])


def mueller_rotator(angle_rad: ArrayLike) -> FloatArray:
    """Mueller matrix that turns the azimuth by +angle: rad, shape (...) in, (..., 4, 4) out. Source: as the retarder."""
    double = 2.0 * np.asarray(angle_rad, float)
    c, s = np.cos(double), np.sin(double)
    return _matrix([[1, 0, 0, 0], [0, c, -s, 0], [0, s, c, 0], [0, 0, 0, 1]])


def mueller_of_jones(jones: ComplexArray) -> FloatArray:
    """Mueller matrix of a Jones matrix: shape (2, 2) in, (4, 4) out.

    It is found by its action on six states, so that it shares no formula with the closed forms above.
    """
    root = np.sqrt(0.5)
    fields = np.array([[1, 0], [0, 1], [root, root], [root, -root], [root, 1j * root], [root, -1j * root]], complex)
    before = stokes_of_jones(fields)
    after = stokes_of_jones(fields @ jones.T)
    return np.linalg.lstsq(before, after, rcond=None)[0].T
