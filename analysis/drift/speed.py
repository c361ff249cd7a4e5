"""How fast the state moves: distribution of speeds on the sphere, rad/s. Source: docs/formulas.md, F-58."""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.drift.displacement import square_angle
from analysis.quantities import FloatArray

SHARES: Final = (0.05, 0.25, 0.5, 0.75, 0.95, 0.99)


@dataclass(frozen=True, slots=True)
class Speeds:
    """Distribution of speeds over one spacing.

    Attributes:
        over_s: Time over which each speed is taken, s: speeds of a random walk fall with its root.
        count: Steps whose both ends are there.
        shares: Q, shape (Q,). ``raw``: quantiles as read, rad/s, shape (Q,), NaN without a step.
        net: Quantiles less the noise, sqrt(angle² - 4 σ²)/time, rad/s; 0 where no more than noise.
        rms_raw, rms_net: Root of the mean square, rad/s; net NaN where the mean is below the noise.
        noise: What noise alone shows, 2 σ/time, rad/s.
        noise_share: Share of steps no longer than that.
    """

    over_s: float
    count: int
    shares: FloatArray
    raw: FloatArray
    net: FloatArray
    rms_raw: float
    rms_net: float
    noise: float
    noise_share: float


def speeds(
    sop: FloatArray, interval_s: float, *, noise_rad: float = 0.0, shares: tuple[float, ...] = SHARES
) -> Speeds:
    """Speeds from each state to the next on an even grid; a step over a gap is none.

    Args:
        sop: Unit Stokes vectors, shape (N, 3), NaN in a gap.
        interval_s: Spacing, s, above 0.
        noise_rad: σ of one state per tangent coordinate, rad (of a mean over n readings: σ/√n).
        shares: Quantiles wanted, 0 to 1.
    Raises:
        ValueError: The shape or the interval is out of range.
    """
    sop = np.asarray(sop, dtype=np.float64)
    if sop.ndim != 2 or sop.shape[1] != 3:
        raise ValueError(f"sop has shape {sop.shape}; pass unit Stokes vectors of shape (N, 3).")
    apart = np.diff(sop, axis=0)
    step_rad = np.sqrt(square_angle(np.einsum("ni,ni->n", apart, apart)))
    return speeds_of_steps(step_rad, interval_s, noise_rad, shares, coordinates=2)


def speeds_of_steps(
    step_rad: FloatArray, interval_s: float, noise_rad: float, shares: tuple[float, ...] = SHARES, *, coordinates: int
) -> Speeds:
    """The same from the steps' lengths, rad, shape (N,), NaN left out; ``coordinates`` 1 for the steps of an angle alone."""
    if not interval_s > 0.0:
        raise ValueError(f"interval_s={interval_s!r} must be above 0.")
    square = np.asarray(step_rad, dtype=np.float64) ** 2
    square = square[np.isfinite(square)]
    noise2 = 2.0 * coordinates * noise_rad**2
    wanted, noise = np.asarray(shares, dtype=np.float64), math.sqrt(noise2) / interval_s
    if not len(square):
        nothing = np.full(len(wanted), np.nan)
        return Speeds(interval_s, 0, wanted, nothing, nothing, math.nan, math.nan, noise, math.nan)
    at_share = np.quantile(square, wanted)
    mean = float(square.mean())
    return Speeds(
        over_s=interval_s, count=len(square), shares=wanted, raw=np.sqrt(at_share) / interval_s,
        net=np.sqrt(np.maximum(at_share - noise2, 0.0)) / interval_s, rms_raw=math.sqrt(mean) / interval_s,
        rms_net=math.sqrt(mean - noise2) / interval_s if mean >= noise2 else math.nan,
        noise=noise, noise_share=float(np.mean(square <= noise2)),
    )  # fmt: skip
