"""The leakage of a splitter from two exposures: all light meant for port 1, then all light meant for port 2.

What is seen is the splitter's leakage and what the light itself has in the other state (a polarizer lets some through,
and stands a little off). The second can only be bounded: between nothing and what its extinction ratio allows, and never
more than was seen. Source: docs/formulas.md, F-140.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.quantities import FloatArray
from analysis.reduce.zero import mean_error

#: 1 sigma of an even distribution of width 1: 1 / sqrt(12) (JCGM 100:2008, 4.3.7, from memory).
EVEN_SIGMA: Final = 1.0 / np.sqrt(12.0)


@dataclass(frozen=True, slots=True)
class SeenShare:
    """Share of the light that landed in the wrong port in one exposure, and its 1 sigma; dimensionless."""

    share: float
    sigma: float


@dataclass(frozen=True, slots=True)
class Leakage:
    """``matrix`` [[a, b], [c, d]], columns adding up to 1, and 1 sigma of each entry, both shape (2, 2)."""

    matrix: FloatArray
    sigma: FloatArray


def seen_share(
    bright: FloatArray, dark: FloatArray, *, bright_zero_sigma: float = 0.0, dark_zero_sigma: float = 0.0
) -> SeenShare:
    """The share in the wrong port of one exposure.

    Args:
        bright, dark: Nets of the port that is meant and of the other, behind zero and gain, one linear unit, shape (N,),
            finite, N at least `analysis.reduce.zero.LEAST_READINGS`.
        bright_zero_sigma, dark_zero_sigma: 1 sigma of their zeros, same unit.
    Returns:
        x = s/(1 + s), s = sum of dark / sum of bright. The error of s is that of the mean of dark - s bright (what both
        ports share, the source's flicker, drops out), with the zeros' errors beside it. Source: F-140.
    Raises:
        ValueError: The meant port reads nothing above its zero.
    """
    mean = float(np.mean(bright))
    if not mean > 0.0:
        raise ValueError(f"bright has a mean of {mean!r}; give an exposure in which the meant port is lit.")
    ratio = float(np.mean(dark)) / mean
    noise = mean_error(dark - ratio * bright)
    sigma = float(np.sqrt(noise**2 + dark_zero_sigma**2 + (ratio * bright_zero_sigma) ** 2)) / mean
    return SeenShare(ratio / (1.0 + ratio), sigma / (1.0 + ratio) ** 2)


def leakage_from_exposures(one: SeenShare, two: SeenShare, *, light_er_db: float | None = None) -> Leakage:
    """The leakage matrix from the shares seen with light meant for port 1 (``one``) and for port 2 (``two``).

    Args:
        one, two: See `seen_share`; a share below 0 (noise about nothing) counts as 0, its sigma stays.
        light_er_db: Least extinction ratio of the light of the exposures, dB; None: taken for pure, so that what it
            leaks itself counts as the splitter's.
    Returns:
        The matrix that explains both exposures with the light's own share p in the middle of what is possible,
        0 … min(seen, 1/(1 + 10^(ER/10))), and its uncertainty with p even in there. Source: F-140.
    Raises:
        ValueError: A share reaches one half, or ``light_er_db`` is not above 0.
    """
    if light_er_db is not None and not light_er_db > 0.0:
        raise ValueError(f"light_er_db={light_er_db!r} dB must be above 0; give the extinction ratio of the polarizer.")
    seen = [max(found.share, 0.0) for found in (one, two)]
    if max(seen) >= 0.5:
        raise ValueError(f"A share of {max(seen):.3g} is in the wrong port; expose each port with the light meant for it.")
    most = 0.0 if light_er_db is None else 1.0 / (1.0 + 10.0 ** (light_er_db / 10.0))
    wide = [min(most, share) for share in seen]
    (x, y), (p, q) = seen, (0.5 * wide[0], 0.5 * wide[1])
    left = 1.0 - p - q
    c = ((x - p) * (1.0 - q) + p * (y - q)) / left
    b = ((y - q) * (1.0 - p) + q * (x - p)) / left
    light = (EVEN_SIGMA * (1.0 - b - c) * wide[0], EVEN_SIGMA * (1.0 - b - c) * wide[1])
    own = (np.hypot(one.sigma, light[0]), np.hypot(two.sigma, light[1]))
    c_sigma = float(np.hypot((1.0 - q) * own[0], p * own[1])) / left
    b_sigma = float(np.hypot((1.0 - p) * own[1], q * own[0])) / left
    return Leakage(np.array([[1.0 - c, b], [c, 1.0 - b]]), np.array([[c_sigma, b_sigma], [c_sigma, b_sigma]]))
