"""Isotropic random walk on the sphere: what it predicts, and the four ways to name its rate.

Source: docs/formulas.md, F-59 to F-61.
"""

from functools import lru_cache

import numpy as np
from scipy.special import eval_legendre

from analysis.quantities import FloatArray

_SERIES_FROM: float = 2e-3  # D t below which the expansion for short times is better than 120 polynomials
_TERMS: int = 120


def diffusion_from_linewidth(linewidth_hz: FloatArray | float) -> FloatArray:
    """Diffusion constant D = 4 π Δp, rad²/s, of a polarization linewidth Δp, Hz."""
    return 4.0 * np.pi * np.asarray(linewidth_hz, dtype=np.float64)


def linewidth_from_diffusion(diffusion_rad2_per_s: FloatArray | float) -> FloatArray:
    """Polarization linewidth Δp = D/(4 π), Hz, of a diffusion constant, rad²/s."""
    return np.asarray(diffusion_rad2_per_s, dtype=np.float64) / (4.0 * np.pi)


def decorrelation_time_s(diffusion_rad2_per_s: FloatArray | float) -> FloatArray:
    """Time after which the mean cosine has fallen to 1/e: 1/(2 D) = 1/(8 π Δp), s; inf for 0."""
    with np.errstate(divide="ignore"):
        return 1.0 / (2.0 * np.asarray(diffusion_rad2_per_s, dtype=np.float64))


def mean_cosine(diffusion_rad2_per_s: FloatArray | float, after_s: FloatArray | float) -> FloatArray:
    """Mean of s · s' after a time: exp(-2 D t)."""
    return np.exp(-2.0 * _travel(diffusion_rad2_per_s, after_s))


def mean_square_angle_rad2(diffusion_rad2_per_s: FloatArray | float, after_s: FloatArray | float) -> FloatArray:
    """Mean squared angle after a time, rad²: 4 D t while small, (π² - 4)/2 in the end."""
    travel = _travel(diffusion_rad2_per_s, after_s)
    short = 4.0 * travel * (1.0 - travel / 3.0 - 2.0 * travel**2 / 45.0)
    degree = np.arange(_TERMS)
    series = np.exp(-degree * (degree + 1) * np.maximum(travel, _SERIES_FROM)[..., None]) @ _square_angle_terms()
    return np.where(travel < _SERIES_FROM, short, series)


def orthogonal_share(diffusion_rad2_per_s: FloatArray | float, after_s: FloatArray | float) -> FloatArray:
    """Expected share of power in the orthogonal state after a time from a perfect start: (1 - exp(-2 D t))/2."""
    return -0.5 * np.expm1(-2.0 * _travel(diffusion_rad2_per_s, after_s))


def stokes_step_correlation(sigma2: FloatArray | float) -> FloatArray:
    """Mean of s · s' over one step exp(-i a·σ), a ~ N(0, sigma2 I): [1 + 2 (1 - 4 σ²) exp(-2 σ²)]/3, σ² = 2 π Δp T."""
    sigma2 = np.asarray(sigma2, dtype=np.float64)
    return (1.0 + 2.0 * (1.0 - 4.0 * sigma2) * np.exp(-2.0 * sigma2)) / 3.0


def field_step_correlation(sigma2: FloatArray | float) -> FloatArray:
    """The same of the Jones vector: (1 - σ²) exp(-σ²/2). Falls more slowly than the Stokes vector's; not to be mixed up."""
    sigma2 = np.asarray(sigma2, dtype=np.float64)
    return (1.0 - sigma2) * np.exp(-0.5 * sigma2)


def _travel(diffusion_rad2_per_s: FloatArray | float, after_s: FloatArray | float) -> FloatArray:
    travel = np.asarray(diffusion_rad2_per_s, dtype=np.float64) * np.asarray(after_s, dtype=np.float64)
    if (travel < 0.0).any():
        raise ValueError("the diffusion constant and the time must not be negative.")
    return travel


@lru_cache(maxsize=1)
def _square_angle_terms() -> FloatArray:
    """Legendre coefficients of angle², by quadrature."""
    node, weight = np.polynomial.legendre.leggauss(2000)
    angle = 0.5 * np.pi * (node + 1.0)
    measure = 0.5 * np.pi * weight * np.sin(angle) * angle**2
    return np.array([(2 * degree + 1) / 2.0 * float(eval_legendre(degree, np.cos(angle)) @ measure) for degree in range(_TERMS)])
