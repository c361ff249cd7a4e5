"""Birefringence that bending and twisting put into plain fibre.

For reading what a re-routed fibre did to the light. labmon computes settings for no element, and drives none.
"""

import numpy as np
from numpy.typing import ArrayLike

from analysis.quantities import FloatArray

BEND_COEFFICIENT = 0.133
"""R. Ulrich, S. C. Rashleigh, W. Eickhoff, Opt. Lett. 5, 273 (1980), from memory; photoelastic constants agree to 2 %."""
CLADDING_RADIUS_M = 62.5e-6
TWIST_COEFFICIENT = 0.08
"""Turn of the azimuth per turn of twist (lab frame), from the photoelastic constants of silica (JOB 2a, calculated)."""


def bend_coefficient(index: float, p11: float, p12: float, poisson_ratio: float) -> float:
    """Factor a of dn = a (r/R)²: (n³/4)(p12 - p11)(1 + ν). Source: as ``BEND_COEFFICIENT``."""
    return index**3 / 4.0 * (p12 - p11) * (1.0 + poisson_ratio)


def bend_retardance_rad(bend_radius_m: ArrayLike, turns: ArrayLike, wavelength_m: ArrayLike, *,
                        cladding_radius_m: float = CLADDING_RADIUS_M, coefficient: float = BEND_COEFFICIENT) -> FloatArray:
    """Retardance of bent fibre without tension, coating stress or birefringence of its own.

    Args:
        bend_radius_m: Radius of the bend, to the fibre's axis, m; wavelength_m: In vacuum, m; turns: Full turns; broadcast.
        cladding_radius_m: Radius of the glass, not of the coating, m. coefficient: a of dn = a (r/R)², good to 2 %.
    Returns:
        4π² a r² turns / (wavelength R), rad, not wrapped; NaN where a radius or wavelength is not above 0.
    Source: docs/formulas.md, F-110.
    """
    radius, wavelength = np.asarray(bend_radius_m, np.float64), np.asarray(wavelength_m, np.float64)
    way = np.where((radius > 0.0) & (wavelength > 0.0), wavelength * radius, np.nan)
    return 4.0 * np.pi**2 * coefficient * cladding_radius_m**2 * np.asarray(turns, np.float64) / way


def twist_turn_rad(twist_rad: float, coefficient: float = TWIST_COEFFICIENT) -> float:
    """Turn of the azimuth in the lab frame, rad, from a twist of ``twist_rad``."""
    return coefficient * twist_rad
