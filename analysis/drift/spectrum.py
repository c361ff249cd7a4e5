"""Likelihood of steps between neighbouring places, in the basis in which random walk and reading noise are independent.

Steps of a random walk with reading noise have the covariance q on the diagonal plus 2 σ², -σ² beside it; the discrete sine
transform (type I) makes it diagonal, exactly, for any number of steps. Source: docs/formulas.md, F-62.
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.fft import dst
from scipy.optimize import minimize_scalar

from analysis.quantities import FloatArray

_SHORTEST_RUN: Final = 8
_LEAST_SHARE: Final = 1e-9


@dataclass(frozen=True, slots=True)
class StepSpectrum:
    """Squared sine-transform parts of all runs of steps without a gap.

    Attributes:
        power: Sum over the coordinates, rad², shape (K,).
        curvature: g = 2 - 2 cos of each part, 0 to 4, shape (K,): the spectrum of steps of white noise over σ².
        coordinates: C, 1 or 2.
        runs: First step and number of steps of each run used, shape (R, 2).
    """

    power: FloatArray
    curvature: FloatArray
    coordinates: int
    runs: FloatArray


@dataclass(frozen=True, slots=True)
class Fit:
    """Most likely parameters of one model.

    Attributes:
        log_likelihood: Natural log, up to a constant common to all models of the same steps.
        walk_rad2: q, mean square of the walk's step per coordinate, rad².
        noise_rad2: σ² per coordinate, rad² (less q/6 where places are means: see `walk_shape`).
        inertia: φ of a bounded walk, 0 to 1; 1 for a free one.
        parameters: How many were fitted.
    """

    log_likelihood: float
    walk_rad2: float
    noise_rad2: float
    inertia: float
    parameters: int


def step_spectrum(steps: FloatArray) -> StepSpectrum:
    """Spectrum of steps, rad, shape (N, C), NaN at gaps; runs shorter than 8 steps are left out."""
    runs = runs_of(np.isfinite(steps).all(axis=1))
    parts = [transformed(steps[first : first + count]) for first, count in runs]
    curvature = [curvature_of(count) for _, count in runs]
    power = np.concatenate([(part**2).sum(axis=1) for part in parts]) if parts else np.zeros(0)
    return StepSpectrum(power, np.concatenate(curvature) if curvature else np.zeros(0), steps.shape[1], runs)


def runs_of(known: FloatArray) -> FloatArray:
    """First place and length of each run of True of at least 8, shape (R, 2)."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], known, [False]]).astype(np.int8)))
    runs = np.stack([edges[::2], edges[1::2] - edges[::2]], axis=1)
    return runs[runs[:, 1] >= _SHORTEST_RUN]


def transformed(steps: FloatArray) -> FloatArray:
    """Orthonormal sine transform along the first axis."""
    return dst(steps, type=1, axis=0, norm="ortho")


def curvature_of(count: int) -> FloatArray:
    """g of each of ``count`` parts."""
    return 2.0 - 2.0 * np.cos(np.pi * np.arange(1, count + 1) / (count + 1))


def walk_shape(curvature: FloatArray, averaged: int, inertia: float = 1.0) -> FloatArray:
    """Spectrum of the steps of a walk with q = 1: 1 if free, less at low frequency if bounded (φ below 1).

    Places that are means over n readings blur the walk: times 1 - g (n² - 1)/(6 n²).
    """
    blur = (averaged**2 - 1.0) / (6.0 * averaged**2)
    pull = 1.0 if inertia == 1.0 else curvature / ((1.0 - inertia) ** 2 + inertia * curvature)
    return (1.0 - blur * curvature) * pull


def log_likelihood(spectrum: StepSpectrum, expected: FloatArray) -> float:
    """Of parts with the variances ``expected``, rad², shape (K,)."""
    return float(-0.5 * (spectrum.coordinates * np.log(expected).sum() + (spectrum.power / expected).sum()))


def fit_still(spectrum: StepSpectrum) -> Fit:
    """Reading noise alone."""
    return _scaled(spectrum, spectrum.curvature, 0.0, 1.0, 1)


def fit_walk(spectrum: StepSpectrum, averaged: int) -> Fit:
    """Free random walk with reading noise."""
    return _best_share(spectrum, walk_shape(spectrum.curvature, averaged), 1.0, 2)


def fit_bounded(spectrum: StepSpectrum, averaged: int) -> Fit:
    """Bounded random walk (pulled back towards a fixed state) with reading noise; Whittle's approximation."""
    count = len(spectrum.power)

    def fit(log_pull: float) -> Fit:
        inertia = 1.0 - math.exp(log_pull)
        return _best_share(spectrum, walk_shape(spectrum.curvature, averaged, inertia), inertia, 3)

    tries = np.linspace(np.log(0.5 / count), np.log(0.98), 14)
    best = int(np.argmax([fit(value).log_likelihood for value in tries]))
    bounds = (tries[max(best - 1, 0)], tries[min(best + 1, len(tries) - 1)])
    found = minimize_scalar(lambda value: -fit(value).log_likelihood, bounds=bounds, method="bounded", options={"xatol": 0.02})
    return fit(float(found.x))


def _best_share(spectrum: StepSpectrum, walk: FloatArray, inertia: float, parameters: int) -> Fit:
    """Best ratio of walk to noise, on a log scale; both ends (no noise, no walk) are tried too."""

    def fit(log_odds: float) -> Fit:
        share = 1.0 / (1.0 + math.exp(-log_odds))
        return _scaled(spectrum, walk, share, inertia, parameters)

    found = minimize_scalar(lambda odds: -fit(odds).log_likelihood, bounds=(-20.0, 12.0), method="bounded",
                            options={"xatol": 1e-3})
    ends = (_scaled(spectrum, walk, 1.0 - _LEAST_SHARE, inertia, parameters), fit(float(found.x)), fit(-20.7))
    return max(ends, key=lambda one: one.log_likelihood)


def _scaled(spectrum: StepSpectrum, walk: FloatArray, share: float, inertia: float, parameters: int) -> Fit:
    shape = share * walk + (1.0 - share) * spectrum.curvature
    scale = float(np.mean(spectrum.power / shape)) / spectrum.coordinates
    if not scale > 0.0:  # nothing ever moved: any model is as good
        return Fit(float("inf"), 0.0, 0.0, inertia, parameters)
    return Fit(log_likelihood(spectrum, scale * shape), scale * share, scale * (1.0 - share), inertia, parameters)
