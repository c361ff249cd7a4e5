"""How far the state has gone after a time: mean squared angle and mean cosine against the lag.

Source: docs/formulas.md, F-57.
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.drift.allan_curve import octaves
from analysis.quantities import FloatArray, IntArray

CEILING_RAD2: Final = (math.pi**2 - 4.0) / 2.0  # mean squared angle of two states that know nothing of each other
_STARTS_PER_LAG: Final = 8


@dataclass(frozen=True, slots=True)
class Displacement:
    """Displacement at T lags, shape (T,), NaN without a pair.

    Attributes:
        tau_s: Lag, s.
        mean_square_rad2: Mean squared great-circle angle D2, noise included; saturates at `CEILING_RAD2` (2.935 rad²),
            which does not mean that the drift has stopped.
        net_rad2: The same less ``noise_rad2``; may be negative.
        noise_rad2: What reading noise adds at every lag: 4 σ², σ per tangent coordinate.
        mean_cosine: Mean of s · s'.
        log_cosine: -0.5 ln of it: grows as D tau without a ceiling for isotropic diffusion, noise being a constant; NaN
            where the mean cosine is not above 0.
        pairs: Pairs that each rests on; overlapping ones are not independent.
    """

    tau_s: FloatArray
    mean_square_rad2: FloatArray
    net_rad2: FloatArray
    noise_rad2: float
    mean_cosine: FloatArray
    log_cosine: FloatArray
    pairs: IntArray


def displacement(
    sop: FloatArray, interval_s: float, factors: IntArray | None = None, *, noise_rad: float = 0.0
) -> Displacement:
    """Displacement of states on an even grid.

    Args:
        sop: Unit Stokes vectors, shape (N, 3); NaN in a gap. A pair needs its two ends only.
        interval_s: Spacing, s.
        factors: Lags in intervals, at least 1; octaves if left out. Starts are an eighth of a lag apart, at least one place.
        noise_rad: σ of one reading per tangent coordinate, rad.
    Raises:
        ValueError: Shape, interval or factors out of range.
    """
    sop = np.asarray(sop, dtype=np.float64)
    if sop.ndim != 2 or sop.shape[1] != 3:
        raise ValueError(f"sop has shape {sop.shape}; pass unit Stokes vectors of shape (N, 3).")
    if not interval_s > 0.0:
        raise ValueError(f"interval_s={interval_s!r} must be above 0.")
    factors = octaves(len(sop)) if factors is None else np.asarray(factors, dtype=np.int64)
    if (factors < 1).any():
        raise ValueError(f"factors={factors.tolist()} must be at least 1.")
    rows = [_at_lag(sop, int(m)) for m in factors]
    square, cosine = (np.array([row[place] for row in rows]) for place in (0, 1))
    noise_rad2 = 4.0 * noise_rad**2
    log_cosine = -0.5 * np.log(np.where(cosine > 0.0, cosine, np.nan))
    pairs = np.array([row[2] for row in rows], dtype=np.int64)
    return Displacement(factors * interval_s, square, square - noise_rad2, noise_rad2, cosine, log_cosine, pairs)


def measured_decorrelation_s(apart: Displacement) -> float:
    """First lag at which -0.5 ln of the mean cosine has risen by 1/2 (cosine by 1/e) over its value at no lag, s.

    The value at no lag is the noise's constant, by the line through the first two lags. Linear between lags; NaN where it
    is not reached, as for light that circles or is bounded, whose cosine never falls to 0. No model: for D see
    `analysis.drift.diffusion`.
    """
    if len(apart.tau_s) < 2:
        return math.nan
    rise = apart.log_cosine[1] - apart.log_cosine[0]
    start = apart.log_cosine[0] - rise * apart.tau_s[0] / (apart.tau_s[1] - apart.tau_s[0])
    risen = apart.log_cosine - max(start, 0.0)
    above = np.flatnonzero(risen >= 0.5)
    if not len(above):
        return math.nan
    place = int(above[0])
    if place == 0:
        return float(apart.tau_s[0] * 0.5 / risen[0])
    return float(np.interp(0.5, risen[place - 1 : place + 1], apart.tau_s[place - 1 : place + 1]))


def square_angle(chord2: FloatArray) -> FloatArray:
    """Squared angle, rad², of a squared chord 0 to 4: (2 asin(chord/2))², exact at small angles."""
    return 4.0 * np.arcsin(np.sqrt(np.clip(0.25 * chord2, 0.0, 1.0))) ** 2


def _at_lag(sop: FloatArray, m: int) -> tuple[float, float, int]:
    step = max(1, m // _STARTS_PER_LAG)
    apart = sop[m::step] - sop[: max(len(sop) - m, 0) : step]
    chord2 = np.einsum("ni,ni->n", apart, apart)
    chord2 = chord2[np.isfinite(chord2)]
    if not len(chord2):
        return math.nan, math.nan, 0
    return float(square_angle(chord2).mean()), 1.0 - 0.5 * float(chord2.mean()), len(chord2)
