"""A zero from a stretch of blocked beam: mean, its error and the spread, per port; and whether the stretch is fit for it.

The error of the mean comes from the means of consecutive batches, so that slow noise is not taken for many independent
readings (batch means: Law and Kelton, Simulation Modeling and Analysis; from memory). A stretch is *not steady* where its
two halves differ by more than their errors allow, or one reading stands far off: someone opened the shutter meanwhile. It
is *not dark* where a port shows more than a small share of the usual *bright* light: a dark port's own usual reading may be
mostly zero, and says nothing. Source: docs/formulas.md, F-115, F-116.
"""

from dataclasses import dataclass
from enum import StrEnum
from typing import Final

import numpy as np

from analysis.quantities import FloatArray, IntArray

LEAST_READINGS: Final = 10
BATCHES: Final = 8
#: Halves that differ by more standard errors than this are not one level: by chance, 6 in 100,000 with normal noise.
STEADY_WITHIN: Final = 4.0
#: A reading so many robust sigma from the median is no noise (normal noise: 1 in 500 million).
OUTLIER_BEYOND: Final = 6.0
#: What a port may still show of the usual bright light, either way.
DARK_SHARE: Final = 0.01
_MAD_TO_SIGMA: Final = 1.4826


class Unfit(StrEnum):
    """Why no zero can be taken from a stretch."""

    TOO_FEW = "too few readings"
    NOT_STEADY = "not steady"
    NOT_DARK = "not dark"
    NO_LIGHT_KNOWN = "no light known"


#: Being told that there is nothing to compare with keeps nobody from entering a zero; the others do.
REFUSING: Final = frozenset({Unfit.TOO_FEW, Unfit.NOT_STEADY, Unfit.NOT_DARK})


@dataclass(frozen=True, slots=True)
class PortZero:
    """One port's zero in the raw linear unit: mean, 1 sigma of the mean, 1 sigma of a reading, and what speaks against it.

    ``light_share`` is the mean as a share of the usual bright light, NaN where that is not known. ``is_frozen``: all readings
    are equal, so that the spread says nothing.
    """

    mean: float
    error: float
    sigma: float
    count: int
    light_share: float
    is_frozen: bool
    unfit: tuple[Unfit, ...]

    @property
    def is_refused(self) -> bool:
        """No zero may be taken from this."""
        return bool(REFUSING.intersection(self.unfit))


def port_zero(raw: FloatArray, bright: float | None) -> PortZero:
    """A port's zero from readings taken while the beam was blocked.

    Args:
        raw: Readings on a linear scale in order of time, shape (N,); NaN is left out.
        bright: What the tap's bright port usually reads, same unit; None where no light is known: then it cannot be told
            whether the port is dark.
    Returns:
        See `PortZero`; NaN where there are fewer readings than `LEAST_READINGS`.
    """
    raw = np.asarray(raw, dtype=np.float64)
    raw = raw[np.isfinite(raw)]
    if len(raw) < LEAST_READINGS:
        return PortZero(np.nan, np.nan, np.nan, len(raw), np.nan, False, (Unfit.TOO_FEW,))
    mean, sigma = float(raw.mean()), float(raw.std(ddof=1))
    is_frozen = bool((raw == raw[0]).all())
    error = mean_error(raw)
    share = np.nan if bright is None or bright <= 0.0 else mean / bright
    unfit = []
    if not is_frozen and not is_steady(raw):
        unfit.append(Unfit.NOT_STEADY)
    if np.isnan(share):
        unfit.append(Unfit.NO_LIGHT_KNOWN)
    elif abs(share) > DARK_SHARE:
        unfit.append(Unfit.NOT_DARK)
    return PortZero(mean, error, sigma, len(raw), float(share), is_frozen, tuple(unfit))


def mean_error(values: FloatArray) -> float:
    """1 sigma of the mean of a stretch of correlated readings, from the means of consecutive batches.

    Args:
        values: In order of time, shape (N,), finite, N at least `LEAST_READINGS`.
    Returns:
        The larger of the batch-means error and the error of independent readings, which bounds it from below.
    """
    count = min(BATCHES, len(values) // 2)
    means = np.array([part.mean() for part in np.array_split(values, count)])
    return float(max(means.std(ddof=1) / np.sqrt(count), values.std(ddof=1) / np.sqrt(len(values))))


def is_steady(values: FloatArray) -> bool:
    """Whether a stretch, shape (N,), finite, is one level: no reading far off, and halves that agree."""
    middle = np.median(values)
    spread = _MAD_TO_SIGMA * np.median(np.abs(values - middle))
    if spread > 0.0 and bool((np.abs(values - middle) > OUTLIER_BEYOND * spread).any()):
        return False
    first, second = np.array_split(values, 2)
    error = np.hypot(first.std(ddof=1) / np.sqrt(len(first)), second.std(ddof=1) / np.sqrt(len(second)))
    return bool(abs(first.mean() - second.mean()) <= STEADY_WITHIN * max(error, np.finfo(np.float64).tiny))


def bright_level(port1: FloatArray, port2: FloatArray) -> float | None:
    """What the brighter port usually reads: its 95 % quantile, robust against dark hours; None without such a port.

    Args:
        port1, port2: On a linear scale, shape (N,), NaN where absent. A tap without port 1 (and monitor) has none: its dark
            port's usual reading may be mostly zero.
    """
    if not np.isfinite(port1).any():
        return None
    level = max(float(np.nanquantile(port, 0.95)) for port in (port1, port2) if np.isfinite(port).any())
    return level if level > 0.0 else None


def dark_stretches(
    at_us: IntArray, port1: FloatArray, port2: FloatArray, *, least_s: float, longest_gap_s: float
) -> list[tuple[int, int]]:
    """Stretches of the past in which both ports were dark: zeros for the taking.

    Args:
        at_us: Sorted, µs, shape (N,). port1, port2: On a linear scale, shape (N,), NaN where absent.
        least_s: Shortest stretch. longest_gap_s: A longer gap ends a stretch.
    Returns:
        (first, last) reading of each, µs, oldest first, one reading cut off at either end: the shutter moved there. Empty
        where no bright light is known.
    """
    bright = bright_level(port1, port2)
    if bright is None:
        return []
    is_dark = (np.abs(port1) <= DARK_SHARE * bright) & (np.abs(port2) <= DARK_SHARE * bright)
    starts_anew = np.diff(at_us, prepend=at_us[0]) > longest_gap_s * 1e6
    starts_anew[1:] |= is_dark[1:] != is_dark[:-1]
    run = np.cumsum(starts_anew)
    starts = np.flatnonzero(np.diff(run, prepend=-1))
    found = []
    for first, last in zip(starts + 1, np.append(starts[1:], len(run)) - 2, strict=True):
        is_long = last - first + 1 >= LEAST_READINGS and at_us[max(last, first)] - at_us[first] >= least_s * 1e6
        if is_dark[first - 1] and is_long:
            found.append((int(at_us[first]), int(at_us[last])))
    return found
