"""Isotropic random walk of a polarization state on the sphere."""

import numpy as np
from numpy.typing import NDArray

from analysis.fibre.sphere import chained, rotation

FloatArray = NDArray[np.float64]


def diffusion_rad2_per_s(rms_angle_rad: float, after_s: float) -> float:
    """Diffusion constant D of a walk whose rms angle after ``after_s`` is ``rms_angle_rad`` (small angles).

    Source: mean squared angle = 4 D t for Brownian motion with generator D·Laplacian (Roberts & Ursell 1960, from
    memory; re-derived).
    """
    return rms_angle_rad**2 / (4.0 * after_s)


def walk_rotations(step_count: int, step_s: float, diffusion: float, rng: np.random.Generator) -> FloatArray:
    """Accumulated rotations of an isotropic walk.

    Args:
        step_count: Number N of steps.
        step_s: Time of one step, s.
        diffusion: D, rad²/s.
        rng: Seeded generator.
    Returns:
        Quaternions, shape (N, 4); element k after k + 1 steps.
    Source: C. B. Czegledi, M. Karlsson, E. Agrell, P. Johannisson, Sci. Rep. 6, 21217 (2016), model read at
    arXiv:1507.00953: J(a) = exp(-i a·σ), a ~ N(0, σp² I), a rotation by 2|a| on the sphere; D = 2 σp²/T for small steps.
    """
    sigma = np.sqrt(2.0 * diffusion * step_s)
    return chained(rotation(sigma * rng.standard_normal((step_count, 3))))
