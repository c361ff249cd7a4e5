"""A leaky splitter: powers before it from readings behind it, with the uncertainty of its own leakage.

The matrix is [[a, b], [c, d]]: readings = matrix @ (power wanted in port 1, power wanted in port 2); c is the share of
port 1's light that lands in port 2. Powers add, not fields. Near the ceiling the uncertainty of c decides, and it does
not average down: the same wrong c stands behind every reading. Source: docs/formulas.md, F-08, F-22.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.quantities import FloatArray


@dataclass(frozen=True, slots=True)
class PortNets:
    """Net powers of port 1 and 2, their 1 sigma and covariance, shape (N,)."""

    first: FloatArray
    second: FloatArray
    first_sigma: FloatArray
    second_sigma: FloatArray
    covariance: FloatArray | float


def without_leakage(nets: PortNets, leakage: Any, leakage_sigma: Any = None) -> PortNets:
    """Powers before a leaky splitter.

    Args:
        nets: Behind zero and gain, one unit, shape (N,) or single values.
        leakage: [[a, b], [c, d]], shape (2, 2) or (N, 2, 2); None is no leakage.
        leakage_sigma: 1 sigma of each entry, independent of one another, shape as ``leakage``; None is exact.
    Returns:
        P = M^-1 V with covariance M^-1 [cov(V) + diag_i(sum_j u(M_ij)^2 P_j^2)] M^-T, first order; NaN stays NaN.
        A singular matrix gives infinities or NaN. Source: docs/formulas.md, F-08, F-22.
    """
    if leakage is None:
        return nets
    a, b, c, d = _entries(leakage)
    scale = 1.0 / (a * d - b * c)
    first, second = scale * (d * nets.first - b * nets.second), scale * (a * nets.second - c * nets.first)
    variance1, variance2 = np.square(nets.first_sigma), np.square(nets.second_sigma)
    if leakage_sigma is not None:
        ua, ub, uc, ud = _entries(leakage_sigma)
        variance1 = variance1 + (ua * first) ** 2 + (ub * second) ** 2
        variance2 = variance2 + (uc * first) ** 2 + (ud * second) ** 2
    shared = nets.covariance
    return PortNets(
        first,
        second,
        np.abs(scale) * np.sqrt(d**2 * variance1 + b**2 * variance2 - 2.0 * b * d * shared),
        np.abs(scale) * np.sqrt(c**2 * variance1 + a**2 * variance2 - 2.0 * a * c * shared),
        scale**2 * ((a * d + b * c) * shared - c * d * variance1 - a * b * variance2),
    )


def leak_before_splitter(
    leak: Any, leakage: Any, leak_sigma: Any = 0.0, leakage_sigma: Any = None
) -> tuple[FloatArray, FloatArray]:
    """Leak of the light from the leak seen behind a splitter (a mean ratio or a flicker slope).

    Args:
        leak, leak_sigma: Port 2 / port 1 as seen, dimensionless, any shape.
        leakage, leakage_sigma: As `without_leakage`.
    Returns:
        r = (a s - c)/(d - b s) and its 1 sigma, first order; r is signed and not clipped: below 0 the matrix claims
        more leakage than was seen. Source: docs/formulas.md, F-22.
    """
    leak = np.asarray(leak, dtype=np.float64)
    a, b, c, d = _entries(leakage)
    divisor = d - b * leak
    before = (a * leak - c) / divisor
    variance = ((a + b * before) * np.asarray(leak_sigma, dtype=np.float64)) ** 2
    if leakage_sigma is not None:
        ua, ub, uc, ud = _entries(leakage_sigma)
        variance = variance + (ua * leak) ** 2 + (ub * before * leak) ** 2 + uc**2 + (ud * before) ** 2
    return before, np.sqrt(variance) / np.abs(divisor)


def _entries(matrix: Any) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    matrix = np.asarray(matrix, dtype=np.float64)
    if matrix.shape[-2:] != (2, 2):
        raise ValueError(f"leakage has shape {matrix.shape}; give [[a, b], [c, d]], or one such matrix per sample.")
    return matrix[..., 0, 0], matrix[..., 0, 1], matrix[..., 1, 0], matrix[..., 1, 1]
