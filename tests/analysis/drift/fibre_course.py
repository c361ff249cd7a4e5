"""Invented courses of a PM fibre in a room whose air cycles, for the tests of the thermal arc."""

import numpy as np

from analysis.fibre.pm_fibre import PmLink


def leak_course(seed, *, half_arc_rad, kappa=4.8, hours=24, step_s=60, noise=0.02, noise_k=0.01, ends_deg=(1.5, 1.5)):
    """Times, leak, read temperature and true worst ER, dB: the room cycles in 24 min, both readings are noisy."""
    random = np.random.default_rng(seed)
    at_s = np.arange(0, hours * 3600, step_s)
    temperature = half_arc_rad / kappa * np.sin(2 * np.pi * at_s / 1440)
    link = PmLink(launch_rad=np.radians(ends_deg[0]), exit_rad=np.radians(ends_deg[1]))
    crossed = link.crossed_fraction(kappa * temperature + random.uniform(0, 2 * np.pi))
    crossed = crossed * (1 + noise * random.normal(size=len(at_s)))
    worst = np.sin(np.radians(sum(ends_deg))) ** 2
    read = 21.0 + temperature + noise_k * random.normal(size=len(at_s))
    return at_s * 1_000_000, crossed / (1 - crossed), read, 10 * np.log10(1 / worst - 1)


def circle(axis, radius_rad, phase_rad):
    """Points of a circle on the sphere, shape (N, 3)."""
    axis = np.asarray(axis, float) / np.linalg.norm(axis)
    one = np.cross(axis, [0.0, 0.0, 1.0])
    one /= np.linalg.norm(one)
    other = np.cross(axis, one)
    ring = np.outer(np.cos(phase_rad), one) + np.outer(np.sin(phase_rad), other)
    return np.cos(radius_rad) * axis + np.sin(radius_rad) * ring
