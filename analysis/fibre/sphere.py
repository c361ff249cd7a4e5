"""Rotations of the Poincaré sphere as unit quaternions (w, x, y, z): what any lossless fibre does to light."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]


def sop_of_angles(azimuth_rad: ArrayLike, ellipticity_rad: ArrayLike) -> FloatArray:
    """Unit Stokes vector (cos 2χ cos 2ψ, cos 2χ sin 2ψ, sin 2χ): rad, shape (...) in, (..., 3) out."""
    psi, chi = np.broadcast_arrays(np.asarray(azimuth_rad, float), np.asarray(ellipticity_rad, float))
    return np.stack([np.cos(2 * chi) * np.cos(2 * psi), np.cos(2 * chi) * np.sin(2 * psi), np.sin(2 * chi)], axis=-1)


def rotation(vector_rad: ArrayLike) -> FloatArray:
    """Quaternions of rotation vectors (direction = axis, length = angle, rad): shape (..., 3) in, (..., 4) out."""
    vector = np.asarray(vector_rad, float)
    angle = np.linalg.norm(vector, axis=-1, keepdims=True)
    scale = 0.5 * np.sinc(angle / (2.0 * np.pi))
    return np.concatenate([np.cos(0.5 * angle), scale * vector], axis=-1)


def after(second: FloatArray, first: FloatArray) -> FloatArray:
    """The rotation ``first`` followed by ``second``: quaternions, shapes (..., 4)."""
    aw, ax, ay, az = np.moveaxis(second, -1, 0)
    bw, bx, by, bz = np.moveaxis(first, -1, 0)
    return np.stack([aw * bw - ax * bx - ay * by - az * bz, aw * bx + ax * bw + ay * bz - az * by,
                     aw * by - ax * bz + ay * bw + az * bx, aw * bz + ax * by - ay * bx + az * bw], axis=-1)


def turned(rotations: FloatArray, sop: FloatArray) -> FloatArray:
    """Unit Stokes vectors after rotations: shapes (..., 4) and (..., 3) in, (..., 3) out."""
    real, axis = rotations[..., :1], rotations[..., 1:]
    axis, sop = np.broadcast_arrays(axis, sop)
    twice = 2.0 * np.cross(axis, sop)
    return sop + real * twice + np.cross(axis, twice)


def chained(rotations: FloatArray) -> FloatArray:
    """Running product of quaternions, first one applied first.

    Args:
        rotations: One rotation a step, shape (N, 4).
    Returns:
        Shape (N, 4); element k holds steps 0 … k. Done by doubling, so that N steps cost log2 N passes.
    """
    product = rotations.copy()
    reach = 1
    while reach < len(product):
        product[reach:] = after(product[reach:], product[:-reach].copy())
        reach *= 2
    return product / np.linalg.norm(product, axis=-1, keepdims=True)


def angle_between_rad(one: FloatArray, other: FloatArray) -> FloatArray:
    """Great-circle angle of vectors (..., 3), rad, 0 … π; exact for small angles too (atan2 form)."""
    one, other = np.broadcast_arrays(one, other)
    return np.arctan2(np.linalg.norm(np.cross(one, other), axis=-1), np.sum(one * other, axis=-1))
