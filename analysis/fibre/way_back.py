"""The rotation of the sphere that would bring a state back.

This is what labmon may say to a person: about which axis and how far the light has been turned. labmon computes settings for
no element and drives none; which screw or paddle makes such a turn is for the person at the bench to know.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from analysis.fibre.sphere import rotation
from analysis.quantities import FloatArray, angle_between_rad


@dataclass(frozen=True, slots=True)
class SphereRotation:
    """Rotations: ``axis``, unit vectors, shape (..., 3), right-handed; ``angle_rad``, rad in [0, π], shape (...)."""

    axis: FloatArray
    angle_rad: FloatArray

    @property
    def vector_rad(self) -> FloatArray:
        """Axis times angle, rad, shape (..., 3): small rotations add like this."""
        return self.axis * np.asarray(self.angle_rad)[..., None]

    @property
    def quaternion(self) -> FloatArray:
        """As `analysis.fibre.sphere` takes it, shape (..., 4)."""
        return rotation(self.vector_rad)


def smallest_rotation(now: ArrayLike, wanted: ArrayLike) -> SphereRotation:
    """The smallest rotation that takes a state to another.

    Args:
        now, wanted: Stokes vectors (S1, S2, S3), any length above 0, shape (..., 3), broadcast.
    Returns:
        `SphereRotation`. The axis is square to both states; where these are equal, or opposite, within rounding no axis is
        singled out, and one that is square to ``now`` is given. NaN where a vector is null or NaN. One pair of states does not
        tell what the fibre did: any rotation about ``wanted`` may follow.
    Source: docs/formulas.md, F-03, F-114.
    """
    now, wanted = np.broadcast_arrays(_units(now), _units(wanted))
    middle = now + wanted
    is_far = np.einsum("...i,...i->...", middle, middle) < 1.0
    # a × b is a × (b - a) near by and a × (b + a) far away: formed from a small difference, it keeps its digits
    cross = np.cross(now, np.where(is_far[..., None], middle, wanted - now))
    length = np.linalg.norm(cross, axis=-1, keepdims=True)
    has_axis = length > 1e-300
    axis = np.where(has_axis, cross / np.where(has_axis, length, 1.0), _square_to(now))
    return SphereRotation(axis, angle_between_rad(now, wanted))


def _units(states: ArrayLike) -> FloatArray:
    states = np.asarray(states, np.float64)
    if states.shape[-1:] != (3,):
        raise ValueError(f"states has shape {states.shape}; the last axis must hold S1, S2, S3.")
    length = np.linalg.norm(states, axis=-1, keepdims=True)
    return states / np.where(length > 0.0, length, np.nan)


def _square_to(states: FloatArray) -> FloatArray:
    """A unit vector square to each state: across the coordinate axis that is farthest from it."""
    far = np.eye(3)[np.argmin(np.abs(np.nan_to_num(states)), axis=-1)]
    across = np.cross(states, far)
    return across / np.linalg.norm(across, axis=-1, keepdims=True)
