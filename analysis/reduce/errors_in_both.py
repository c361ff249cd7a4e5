"""Slopes between two quantities that both carry noise; ordinary least squares would come out too flat."""

from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.quantities import FloatArray

FEWEST_POINTS: Final = 3


@dataclass(frozen=True, slots=True)
class Line:
    """y = intercept + slope x, each with 1 sigma (points taken as independent of one another)."""

    slope: float
    slope_sigma: float
    intercept: float
    intercept_sigma: float
    count: int


def deming_line(x: FloatArray, y: FloatArray, *, noise_ratio: float) -> Line:
    """Straight line where only the ratio of the two noises is known (Deming; orthogonal regression for ratio 1).

    It takes *all* scatter about the line for noise in that ratio: scatter of another kind in y makes it too steep. Where
    the noise of x itself is known, `known_noise_line` does not have that fault.

    Args:
        x, y: Shape (N,), any units; pairs with a NaN are left out.
        noise_ratio: Variance of the noise of y / that of x, in (y unit / x unit)^2, above 0.
    Returns:
        See `Line`; sigma from the scores of the estimating equation, without assuming their distribution.
    Raises:
        ValueError: Fewer than 3 points, no scatter, or ``noise_ratio`` not above 0.
    Source: docs/formulas.md, F-30.
    """
    if not 0.0 < noise_ratio < np.inf:
        raise ValueError(f"noise_ratio={noise_ratio!r} must be above 0; for noise in y alone use least squares.")
    x, y = _pairs(x, y)
    dx, dy = x - x.mean(), y - y.mean()
    sxx, syy, sxy = dx @ dx, dy @ dy, dx @ dy
    if sxy == 0.0:
        raise ValueError("x and y do not vary together; a slope has no meaning here.")
    excess = noise_ratio * sxx - syy
    root = np.hypot(excess, 2.0 * np.sqrt(noise_ratio) * sxy)
    slope = 2.0 * noise_ratio * sxy / (excess + root) if excess > 0.0 else (root - excess) / (2.0 * sxy)
    residual = dy - slope * dx
    scores = residual * (noise_ratio * dx + slope * dy)
    return _line(x, y, slope, scores, noise_ratio * sxx + 2.0 * slope * sxy - syy, residual, dx)


def known_noise_line(x: FloatArray, y: FloatArray, *, x_sigma: float) -> Line:
    """Straight line where the noise of x is known; y may scatter about it for any reason.

    Args:
        x, y: Shape (N,), any units; pairs with a NaN are left out.
        x_sigma: 1 sigma of the noise of one x, its unit, 0 or above.
    Returns:
        See `Line`: slope = Sxy / (Sxx - N x_sigma^2).
    Raises:
        ValueError: Fewer than 3 points, or x scatters no more than its noise.
    Source: docs/formulas.md, F-30.
    """
    if not 0.0 <= x_sigma < np.inf:
        raise ValueError(f"x_sigma={x_sigma!r} must be 0 or above; give the 1 sigma of one value.")
    x, y = _pairs(x, y)
    dx, dy = x - x.mean(), y - y.mean()
    own = dx @ dx - (len(x) - 1) * x_sigma**2
    if not own > 0.0:
        raise ValueError(f"x scatters no more than its noise of x_sigma={x_sigma!r}; a slope cannot be told from it.")
    slope = (dx @ dy) / own
    residual = dy - slope * dx
    return _line(x, y, slope, dx * residual + slope * x_sigma**2, own, residual, dx)


def _pairs(x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
    x, y = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
    if x.shape != y.shape or x.ndim != 1:
        raise ValueError(f"x has shape {x.shape}, y {y.shape}; pass one value of each per point.")
    both = np.isfinite(x) & np.isfinite(y)
    if both.sum() < FEWEST_POINTS:
        raise ValueError(f"x and y have {both.sum()} pairs without NaN; a line with its uncertainty needs {FEWEST_POINTS}.")
    return x[both], y[both]


def _line(
    x: FloatArray, y: FloatArray, slope: float, scores: FloatArray, bend: float, residual: FloatArray, dx: FloatArray
) -> Line:
    """The line from its slope; ``bend`` is the derivative of the summed scores. Sigma by the sandwich rule."""
    count = len(x)
    influence = scores / bend
    at_zero = residual / count - x.mean() * influence
    freedom = np.sqrt(count / (count - 2))
    return Line(
        float(slope),
        float(freedom * np.linalg.norm(influence)),
        float(y.mean() - slope * x.mean()),
        float(freedom * np.linalg.norm(at_zero)),
        count,
    )
