"""Birefringence that bending and twisting put into plain fibre."""

import numpy as np

BEND_COEFFICIENT = 0.133
"""R. Ulrich, S. C. Rashleigh, W. Eickhoff, Opt. Lett. 5, 273 (1980), from memory; photoelastic constants agree to 2 %."""
CLADDING_RADIUS_M = 62.5e-6
TWIST_COEFFICIENT = 0.08
"""Turn of the azimuth per turn of twist (lab frame), from the photoelastic constants of silica (JOB 2a, calculated)."""


def bend_coefficient(index: float, p11: float, p12: float, poisson_ratio: float) -> float:
    """Factor a of dn = a (r/R)²: (n³/4)(p12 - p11)(1 + ν). Source: as ``BEND_COEFFICIENT``."""
    return index**3 / 4.0 * (p12 - p11) * (1.0 + poisson_ratio)


def bend_retardance_rad(bend_radius_m: float, turns: float, wavelength_m: float, *,
                        cladding_radius_m: float = CLADDING_RADIUS_M, coefficient: float = BEND_COEFFICIENT) -> float:
    """Retardance of bent fibre without tension, rad: 4π² a r² turns / (wavelength R). Source: ``BEND_COEFFICIENT``."""
    return 4.0 * np.pi**2 * coefficient * cladding_radius_m**2 * turns / (wavelength_m * bend_radius_m)


def twist_turn_rad(twist_rad: float, coefficient: float = TWIST_COEFFICIENT) -> float:
    """Turn of the azimuth in the lab frame, rad, from a twist of ``twist_rad``."""
    return coefficient * twist_rad
