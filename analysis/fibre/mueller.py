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


def mueller_depolarizer(share: ArrayLike) -> FloatArray:
    """Mueller matrix of an isotropic depolarizer that leaves ``share`` (0 to 1) of the DOP: (...) in, (..., 4, 4) out."""
    share = np.asarray(share, float)
    return _matrix([[1, 0, 0, 0], [0, share, 0, 0], [0, 0, share, 0], [0, 0, 0, share]])


def mueller_of_jones(jones: ComplexArray) -> FloatArray:
    """Mueller matrices of Jones matrices: shape (..., 2, 2) in, (..., 4, 4) out.

    Found by the action on six states, so that it shares no formula with the closed forms above.
    """
    root = np.sqrt(0.5)
    fields = np.array([[1, 0], [0, 1], [root, root], [root, -root], [root, 1j * root], [root, -1j * root]], complex)
    behind = stokes_of_jones(fields @ np.swapaxes(np.asarray(jones, complex), -1, -2))
    return np.swapaxes(np.linalg.pinv(stokes_of_jones(fields)) @ behind, -1, -2)


def mueller_coherency(mueller: FloatArray) -> ComplexArray:
    """Cloude's coherency matrices of Mueller matrices: shape (..., 4, 4) in, Hermitian (..., 4, 4) out.

    H = 1/4 sum M_ij sigma_i (x) sigma_j^*. Its eigenvalues are all >= 0 for a physical element; a single one is above 0
    for an element that does not depolarize (one with a Jones matrix). Source: docs/formulas.md, F-34.
    """
    mueller = np.asarray(mueller, float)
    return 0.25 * np.einsum("...ij,ijkl->...kl", mueller, _PRODUCTS)


def is_physical(mueller: FloatArray, tolerance: float = 1e-9) -> NDArray[np.bool_]:
    """True where a Mueller matrix (..., 4, 4) could be that of a real element, shape (...).

    No eigenvalue of `mueller_coherency` below -``tolerance`` x M00, and no state gains power. NaN gives False.
    """
    mueller = np.asarray(mueller, float)
    is_finite = np.isfinite(mueller).all(axis=(-1, -2))
    sure = np.where(is_finite[..., None, None], mueller, np.eye(4))
    lowest = np.linalg.eigvalsh(mueller_coherency(sure))[..., 0]
    largest = sure[..., 0, 0] + np.linalg.norm(sure[..., 0, 1:], axis=-1)
    return is_finite & (lowest >= -tolerance * sure[..., 0, 0]) & (largest <= 1.0 + tolerance)


_PAULI = np.array([[[1, 0], [0, 1]], [[1, 0], [0, -1]], [[0, 1], [1, 0]], [[0, -1j], [1j, 0]]], complex)
_PRODUCTS = np.array([[np.kron(one, other.conj()) for other in _PAULI] for one in _PAULI])
