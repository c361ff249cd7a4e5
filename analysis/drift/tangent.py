"""Motion on the sphere as motion in a plane. Source: docs/formulas.md, F-56."""

import numpy as np

from analysis.drift.sphere import tangent_basis
from analysis.fibre.sphere import chained, rotation, turned
from analysis.quantities import FloatArray


def tangent_plane(sop: FloatArray, direction: FloatArray) -> FloatArray:
    """Position of each state seen from ``direction``: distances and bearings from it are true, all others nearly so.

    Args:
        sop: Unit Stokes vectors, shape (N, 3).
        direction: Unit vector, shape (3,).
    Returns:
        rad, shape (N, 2), in the basis of `tangent_basis`; NaN for NaN and for the state opposite to ``direction``.
    """
    across = sop @ tangent_basis(direction).T
    sine = np.linalg.norm(across, axis=1)
    angle = np.arctan2(sine, sop @ direction)
    scale = np.where(sine > 0.0, angle / np.where(sine > 0.0, sine, 1.0), np.where(angle > 1.0, np.nan, 1.0))
    return across * scale[:, None]


def developed_steps(sop: FloatArray) -> FloatArray:
    """Steps from state to state as if the sphere had been rolled along the path on a plane.

    A random walk on the sphere gives a random walk in the plane, however far it goes.

    Args:
        sop: Unit Stokes vectors, shape (N, 3); NaN for a missing one.
    Returns:
        rad, shape (N - 1, 2), NaN where either end is missing; lengths are the great-circle angles.
    """
    known = np.isfinite(sop).all(axis=1)
    if known.sum() < 2:
        return np.full((max(len(sop) - 1, 0), 2), np.nan)
    last = np.maximum.accumulate(np.where(known, np.arange(len(sop)), int(np.argmax(known))))
    path = sop[last]
    cross = np.cross(path[:-1], path[1:])
    sine = np.linalg.norm(cross, axis=1)
    angle = np.arctan2(sine, np.einsum("ni,ni->n", path[:-1], path[1:]))
    turns = cross * (angle / np.where(sine > 0.0, sine, 1.0))[:, None]
    rolled = chained(rotation(turns))
    back = np.concatenate([[[1.0, 0.0, 0.0, 0.0]], rolled[:-1] * np.array([1.0, -1.0, -1.0, -1.0])])
    steps = turned(back, turns) @ tangent_basis(path[0]).T
    steps[~(known[:-1] & known[1:])] = np.nan
    return steps
