"""Diffusion constant and polarization linewidth of a walking state, with intervals. Source: docs/formulas.md, F-61 to F-63."""

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq, minimize_scalar
from scipy.stats import chi2

from analysis.drift.brownian import decorrelation_time_s, linewidth_from_diffusion
from analysis.drift.spectrum import StepSpectrum, fit_walk, log_likelihood, step_spectrum, walk_shape
from analysis.drift.tangent import developed_steps
from analysis.quantities import FloatArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Diffusion:
    """Rate of a random walk, if it is one: ask `analysis.drift.motion` first.

    Attributes:
        diffusion, diffusion_low, diffusion_high: D, rad²/s, and its interval at ``level``; low is 0 where the steps
            could be reading noise alone. NaN without steps.
        noise_rad: σ of one place per tangent coordinate, rad; NaN where it was not fitted.
        steps: Steps used.
        level: Of the intervals.
    """

    diffusion: float
    diffusion_low: float
    diffusion_high: float
    noise_rad: float
    steps: int
    level: float

    @property
    def linewidth_hz(self) -> tuple[float, float, float]:
        """Polarization linewidth Δp = D/(4 π), Hz: estimate, low, high."""
        return tuple(float(linewidth_from_diffusion(d)) for d in self._triple)  # type: ignore[return-value]

    @property
    def decorrelation_s(self) -> tuple[float, float, float]:
        """Time to a mean cosine of 1/e, 1/(2 D), s: estimate, low, high (inf where D may be 0)."""
        estimate, low, high = (float(decorrelation_time_s(d)) for d in self._triple)
        return estimate, high, low

    @property
    def _triple(self) -> tuple[float, float, float]:
        return self.diffusion, self.diffusion_low, self.diffusion_high


def diffusion_from_angles(angle_rad: FloatArray, interval_s: float, level: float = 0.95) -> Diffusion:
    """D from the lengths of independent steps without reading noise: mean(angle²)/(4 interval).

    Args:
        angle_rad: Great-circle angles of successive steps, small beside 1 rad, shape (N,); NaN left out.
        interval_s: Time of a step, s, above 0.
        level: Of the interval: 2 N D̂/D is chi-squared with 2 N degrees of freedom.
    Source: docs/formulas.md, F-61.
    """
    _check(interval_s, level)
    angle_rad = np.asarray(angle_rad, dtype=np.float64)
    angle_rad = angle_rad[np.isfinite(angle_rad)]
    count = len(angle_rad)
    if not count:
        return _nothing(level)
    found = float(np.mean(angle_rad**2)) / (4.0 * interval_s)
    least, most = (2 * count * found / float(chi2.ppf(share, 2 * count)) for share in ((1.0 + level) / 2.0, (1.0 - level) / 2.0))
    return Diffusion(diffusion=found, diffusion_low=least, diffusion_high=most,
                     noise_rad=math.nan, steps=count, level=level)  # fmt: skip


def diffusion_of(sop: FloatArray, interval_s: float, *, averaged: int = 1, level: float = 0.95) -> Diffusion:
    """Most likely D and reading noise of states on an even grid, with the interval of D by profile likelihood.

    Args:
        sop: Unit Stokes vectors, shape (N, 3), NaN in gaps; runs shorter than 8 steps are left out. Steps should stay
            well below 1 rad.
        interval_s: Spacing, s, above 0.
        averaged: How many readings each place is the mean of.
        level: Of the interval.
    Returns:
        The noise is held at 0 or above: where it is far below a step, D comes out low by up to half its standard error.
    Raises:
        ValueError: A shape, spacing or level out of range.
    Source: docs/formulas.md, F-62, F-63.
    """
    sop = np.asarray(sop, dtype=np.float64)
    if sop.ndim != 2 or sop.shape[1] != 3:
        raise ValueError(f"sop has shape {sop.shape}; pass unit Stokes vectors of shape (N, 3).")
    return diffusion_of_steps(developed_steps(sop), interval_s, averaged=averaged, level=level)


def diffusion_of_steps(steps: FloatArray, interval_s: float, *, averaged: int = 1, level: float = 0.95) -> Diffusion:
    """The same from steps in a plane, rad, shape (N, 2), or of an angle alone, shape (N, 1); NaN at gaps."""
    _check(interval_s, level)
    spectrum = step_spectrum(steps)
    count = len(spectrum.power)
    if not count:
        return _nothing(level)
    best = fit_walk(spectrum, averaged)
    noise_rad = math.sqrt(best.noise_rad2)
    if not math.isfinite(best.log_likelihood):
        return Diffusion(diffusion=0.0, diffusion_low=0.0, diffusion_high=0.0, noise_rad=0.0, steps=count, level=level)
    low, high = _profile_interval(spectrum, averaged, best.walk_rad2, best.log_likelihood, level)
    scale = 1.0 / (2.0 * interval_s)
    return Diffusion(diffusion=best.walk_rad2 * scale, diffusion_low=low * scale, diffusion_high=high * scale,
                     noise_rad=noise_rad, steps=count, level=level)  # fmt: skip


def _profile_interval(
    spectrum: StepSpectrum, averaged: int, best_rad2: float, best_log: float, level: float
) -> tuple[float, float]:
    """Where twice the log-likelihood, noise refitted, has fallen by the chi-squared quantile of one degree of freedom."""
    walk = walk_shape(spectrum.curvature, averaged)
    allowed = 0.5 * float(chi2.ppf(level, 1))
    roughest = float(spectrum.power.mean())

    def lack(log_rad2: float) -> float:
        part = math.exp(log_rad2) * walk
        found = minimize_scalar(lambda log_noise: -log_likelihood(spectrum, part + math.exp(log_noise) * spectrum.curvature),
                                bounds=(math.log(roughest) - 25.0, math.log(roughest) + 1.0), method="bounded",
                                options={"xatol": 1e-3})
        return best_log + float(found.fun) - allowed

    middle = math.log(max(best_rad2, 1e-9 * roughest))
    low_end, high_end = middle - 12.0, middle + 1.0
    while lack(high_end) < 0.0:
        high_end += 2.0
    high = math.exp(brentq(lack, middle, high_end, xtol=1e-3)) if lack(middle) < 0.0 else best_rad2
    low = math.exp(brentq(lack, low_end, middle, xtol=1e-3)) if lack(middle) < 0.0 < lack(low_end) else 0.0
    return low, high


def _check(interval_s: float, level: float) -> None:
    if not interval_s > 0.0:
        raise ValueError(f"interval_s={interval_s!r} must be above 0.")
    if not 0.0 < level < 1.0:
        raise ValueError(f"level={level!r} must lie between 0 and 1; 0.95 is usual.")


def _nothing(level: float) -> Diffusion:
    return Diffusion(diffusion=math.nan, diffusion_low=math.nan, diffusion_high=math.nan, noise_rad=math.nan, steps=0,
                     level=level)  # fmt: skip
