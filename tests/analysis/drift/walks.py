"""Simulated motions on the sphere for the tests of drift: our own walk and noise, seeds fixed by the caller."""

import numpy as np

from analysis.fibre.sphere import turned
from analysis.fibre.walk import walk_rotations

START = np.array([1.0, 0.0, 0.0])


def walk(count, diffusion, rng, interval_s=1.0):
    """Brownian motion on the sphere."""
    return turned(walk_rotations(count, interval_s, diffusion, rng), START)


def noisy(sop, noise_rad, rng):
    """Each state read with noise of σ per tangent coordinate."""
    read = sop + noise_rad * rng.standard_normal(sop.shape)
    return read / np.linalg.norm(read, axis=1, keepdims=True)


def about_start(position):
    """States at small positions, rad, shape (N, 2), about S1."""
    length = np.linalg.norm(position, axis=1, keepdims=True)
    return np.concatenate([np.cos(length), np.sinc(length / np.pi) * position], axis=1)


def bounded(count, inertia, width, rng):
    """Positions pulled back by 1 - inertia a step, standard deviation ``width``, rad."""
    position = width * rng.standard_normal((count, 2))
    kick = width * np.sqrt(1.0 - inertia**2)
    for place in range(1, count):
        position[place] = inertia * position[place - 1] + kick * rng.standard_normal(2)
    return position
