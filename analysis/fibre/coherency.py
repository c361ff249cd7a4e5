"""Partly polarized light: coherency matrices, and the split into a polarized and an unpolarized part.

Convention of `analysis.fibre.jones`. Source: docs/formulas.md, F-33.
"""

import numpy as np

from analysis.fibre.jones import ComplexArray
from analysis.quantities import FloatArray


def coherency_of_stokes(stokes: FloatArray) -> ComplexArray:
    """Coherency matrices <E E^+>: Stokes (..., 4) in, (..., 2, 2) out, power units of S0; NaN stays NaN."""
    s0, s1, s2, s3 = np.moveaxis(np.asarray(stokes, dtype=np.float64), -1, 0)
    rows = [np.stack([s0 + s1, s2 - 1j * s3], axis=-1), np.stack([s2 + 1j * s3, s0 - s1], axis=-1)]
    return 0.5 * np.stack(rows, axis=-2)


def stokes_of_coherency(coherency: ComplexArray) -> FloatArray:
    """Stokes vectors (..., 4) of coherency matrices (..., 2, 2); the inverse of `coherency_of_stokes`."""
    xx, yy, yx = coherency[..., 0, 0].real, coherency[..., 1, 1].real, coherency[..., 1, 0]
    return np.stack([xx + yy, xx - yy, 2.0 * yx.real, 2.0 * yx.imag], axis=-1)


def coherency_behind(jones: ComplexArray, coherency: ComplexArray) -> ComplexArray:
    """Coherency matrices behind an element of Jones matrix J: J C J^+; shapes (..., 2, 2). Holds for any DOP."""
    return jones @ coherency @ np.conj(np.swapaxes(jones, -1, -2))


def split_polarized(stokes: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The fully polarized part and the power of the unpolarized part.

    Args:
        stokes: Shape (..., 4), any power unit.
    Returns:
        Stokes vectors (|S|, S1, S2, S3), shape (..., 4), and S0 - |S|, shape (...): negative where DOP is above 1.
    """
    stokes = np.asarray(stokes, dtype=np.float64)
    polarized = stokes.copy()
    polarized[..., 0] = np.sqrt(np.sum(stokes[..., 1:] ** 2, axis=-1))
    return polarized, stokes[..., 0] - polarized[..., 0]


def jones_of_stokes(stokes: FloatArray) -> ComplexArray:
    """Field of the polarized part, up to its phase.

    Args:
        stokes: Shape (..., 4).
    Returns:
        (Ex, Ey), shape (..., 2), square root of the power unit; Ex is real and not negative, and where Ex is 0 Ey is.
        Zero for unpolarized light, NaN for NaN. Source: docs/formulas.md, F-33.
    """
    polarized, _ = split_polarized(stokes)
    length, s1, s2, s3 = np.moveaxis(polarized, -1, 0)
    across2 = s2**2 + s3**2
    far = np.where(length > 0.0, length - np.minimum(s1, 0.0), 1.0)
    x_power = np.where(s1 >= 0.0, 0.5 * (length + s1), 0.5 * across2 / far)  # no cancelling near Ex = 0
    ex = np.sqrt(x_power)
    ey = np.where(ex > 0.0, 0.5 * (s2 + 1j * s3) / np.where(ex > 0.0, ex, 1.0), np.sqrt(length))
    return np.stack([ex.astype(complex), ey], axis=-1)
