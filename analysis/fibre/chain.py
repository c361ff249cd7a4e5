"""Chains of elements by Mueller calculus, and the one rotation that a chain of retarders is."""

from collections.abc import Sequence
from functools import reduce

import numpy as np
from numpy.typing import ArrayLike

from analysis.fibre.mueller import mueller_retarder
from analysis.fibre.way_back import SphereRotation
from analysis.quantities import FloatArray


def mueller_chain(elements: Sequence[ArrayLike]) -> FloatArray:
    """Mueller matrix of elements in the order in which the light meets them.

    Args:
        elements: At least one, each of shape (..., 4, 4), broadcast: one may move with time while another stands.
    Returns:
        Their product, shape (..., 4, 4), the first element rightmost; NaN spreads to its own row of the broadcast only.
    Raises:
        ValueError: No element, or one that is not (..., 4, 4).
    Source: docs/formulas.md, F-113.
    """
    matrices = [np.asarray(element, np.float64) for element in elements]
    if not matrices or any(matrix.shape[-2:] != (4, 4) for matrix in matrices):
        raise ValueError(f"elements have shapes {[matrix.shape for matrix in matrices]}; pass at least one (..., 4, 4).")
    return reduce(lambda so_far, matrix: matrix @ so_far, matrices)


def retarder_chain(retardance_rad: ArrayLike, fast_azimuth_rad: ArrayLike) -> FloatArray:
    """Mueller matrix of linear retarders met one after the other along the last axis.

    Args:
        retardance_rad, fast_azimuth_rad: Rad, shape (..., K), K ≥ 1, broadcast; element 0 is met first.
    Returns:
        Shape (..., 4, 4). Source: docs/formulas.md, F-113.
    """
    each = mueller_retarder(retardance_rad, fast_azimuth_rad)
    return mueller_chain(list(np.moveaxis(each, -3, 0)))


def rotation_of_mueller(matrix: ArrayLike) -> SphereRotation:
    """Axis and angle of the rotation that a lossless chain makes of the sphere.

    Args:
        matrix: Mueller matrices without diattenuation or depolarization, shape (..., 4, 4).
    Returns:
        `SphereRotation`, angle in [0, π]; the axis is (1, 0, 0) where nothing turns, and one of two opposite ones at π.
    Raises:
        ValueError: The lower right block is no rotation to 1e-6: the chain polarizes, depolarizes or is not normalised.
    Source: docs/formulas.md, F-113.
    """
    turn = np.asarray(matrix, np.float64)[..., 1:, 1:]
    off = np.abs(turn @ np.swapaxes(turn, -1, -2) - np.eye(3)).max(initial=0.0)
    if not (off < 1e-6 and np.all(np.linalg.det(turn) > 0.0)):
        raise ValueError(f"matrix is no rotation of the sphere (off by {off:.1e}); leave polarizers out of the chain.")
    trace = np.trace(turn, axis1=-2, axis2=-1)
    # the quaternion's outer product: its longest column is never small, so that neither 0 nor π loses digits
    products = np.empty((*trace.shape, 4, 4))
    products[..., 0, 0] = 1.0 + trace
    products[..., 1:, 1:] = turn + np.swapaxes(turn, -1, -2) + (1.0 - trace)[..., None, None] * np.eye(3)
    doubled = np.stack([turn[..., 2, 1] - turn[..., 1, 2], turn[..., 0, 2] - turn[..., 2, 0],
                        turn[..., 1, 0] - turn[..., 0, 1]], axis=-1)
    products[..., 0, 1:] = products[..., 1:, 0] = doubled
    longest = np.argmax(np.diagonal(products, axis1=-2, axis2=-1), axis=-1)
    quaternion = np.take_along_axis(products, longest[..., None, None], axis=-1)[..., 0]
    quaternion = quaternion / np.linalg.norm(quaternion, axis=-1, keepdims=True)
    quaternion = np.where(quaternion[..., :1] < 0.0, -quaternion, quaternion)
    length = np.linalg.norm(quaternion[..., 1:], axis=-1)
    axis = np.where(length[..., None] > 0.0, quaternion[..., 1:] / np.where(length > 0.0, length, 1.0)[..., None], np.eye(3)[0])
    return SphereRotation(axis, 2.0 * np.arctan2(length, quaternion[..., 0]))
