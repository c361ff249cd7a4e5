"""What kind of motion a state makes: still, Brownian, bounded, cyclic, or undecided. Source: docs/formulas.md, F-64, F-65."""

import math
from dataclasses import dataclass
from enum import StrEnum
from typing import Final

import numpy as np

from analysis.drift.spectrum import (
    Fit,
    StepSpectrum,
    fit_bounded,
    fit_still,
    fit_walk,
    step_spectrum,
    transformed,
    walk_shape,
)
from analysis.drift.sphere import direction_sums
from analysis.drift.tangent import tangent_plane
from analysis.quantities import FloatArray

DECIDED_FROM: Final = 2.0 * math.log(10.0)  # BIC apart by this much: odds of 10 to 1
LEAST_PLACES: Final = 48
WIDEST_MEAN_RESULTANT: Final = 0.6
_LEAST_CYCLES: Final = 2.5
_PLACES_PER_CYCLE: Final = 6.0
_MOST_TRIES: Final = 400


class Motion(StrEnum):
    """A model of motion."""

    STILL = "still"
    BROWNIAN = "Brownian"
    BOUNDED = "bounded"
    CYCLIC = "cyclic"
    UNDECIDED = "undecided"


@dataclass(frozen=True, slots=True, kw_only=True)
class MotionChoice:
    """The model that the readings speak for, and how clearly.

    Attributes:
        motion: Undecided unless the best model leads by `DECIDED_FROM`.
        criterion: Bayes' information criterion of each model tried, less the best one's; 0 is the best.
        lead: Of the best over the second best; the odds are exp(lead/2). NaN where nothing was fitted.
        reason: Why undecided, a short phrase, else empty.
        relaxation_s: Of the bounded model, s; period_s, amplitude_rad: of the cyclic one (angle on the sphere); NaN where
            not fitted.
        places: Steps used.
    """

    motion: Motion
    criterion: dict[Motion, float]
    lead: float
    reason: str
    relaxation_s: float
    period_s: float
    amplitude_rad: float
    places: int


def motion_of(sop: FloatArray, interval_s: float, *, averaged: int = 1) -> MotionChoice:
    """Model choice for states on an even grid.

    Args:
        sop: Unit Stokes vectors, shape (N, 3), NaN in gaps; 200 to 2000 places are best (means, not single readings).
        interval_s: Spacing, s, above 0.
        averaged: How many readings each place is the mean of.
    Returns:
        Undecided as well where fewer than 48 steps are there, or where the state has gone round the sphere (mean
        resultant below 0.6), so that a plane cannot stand for it.
    """
    sop = np.asarray(sop, dtype=np.float64)
    if sop.ndim != 2 or sop.shape[1] != 3:
        raise ValueError(f"sop has shape {sop.shape}; pass unit Stokes vectors of shape (N, 3).")
    sums = direction_sums(sop)
    length = float(np.linalg.norm(sums.total))
    if not sums.count or length < WIDEST_MEAN_RESULTANT * sums.count:
        return _undecided("no directions" if not sums.count else "the state goes round too much of the sphere")
    return motion_in_plane(tangent_plane(sop, sums.total / length), interval_s, averaged=averaged)


def motion_in_plane(position: FloatArray, interval_s: float, *, averaged: int = 1) -> MotionChoice:
    """The same for positions in a plane, rad, shape (N, 2), or for an angle alone, shape (N, 1); NaN in gaps."""
    if not interval_s > 0.0:
        raise ValueError(f"interval_s={interval_s!r} must be above 0.")
    steps = np.diff(position, axis=0)
    spectrum = step_spectrum(steps)
    if len(spectrum.power) < LEAST_PLACES:
        return _undecided(f"fewer than {LEAST_PLACES} steps")
    if not spectrum.power.any():
        return _undecided("the readings never change")
    walk, bounded = fit_walk(spectrum, averaged), fit_bounded(spectrum, averaged)
    cycle = _fit_cycle(steps, spectrum, walk, averaged)
    fits = {Motion.STILL: fit_still(spectrum), Motion.BROWNIAN: walk, Motion.BOUNDED: bounded}
    if cycle is not None:
        fits[Motion.CYCLIC] = cycle.fit
    return _choice(fits, cycle, len(spectrum.power), spectrum.coordinates, interval_s)


@dataclass(frozen=True, slots=True)
class _Cycle:
    fit: Fit
    period: float
    amplitude_rad: float


def _fit_cycle(steps: FloatArray, spectrum: StepSpectrum, walk: Fit, averaged: int) -> _Cycle | None:
    """Best sinusoid in every coordinate, by least squares weighted with the walk's spectrum, then the rest fitted again."""
    span = float(spectrum.runs[-1].sum() - spectrum.runs[0, 0])
    most = span / _PLACES_PER_CYCLE
    if most <= _LEAST_CYCLES:
        return None
    cycles = np.linspace(_LEAST_CYCLES, most, min(_MOST_TRIES, max(int(4 * (most - _LEAST_CYCLES)), 2)))
    weight = 1.0 / np.sqrt(walk.walk_rad2 * walk_shape(spectrum.curvature, averaged) + walk.noise_rad2 * spectrum.curvature)
    moved = np.concatenate([transformed(steps[first : first + count]) for first, count in spectrum.runs])
    waves = _waves(spectrum, 2.0 * np.pi * cycles / span)
    gain, parts = _explained(moved * weight[:, None], waves * weight[:, None, None])
    best = int(np.argmax(gain))
    rest = moved - waves[:, best] @ parts[best]
    fit = fit_walk(StepSpectrum((rest**2).sum(axis=1), spectrum.curvature, spectrum.coordinates, spectrum.runs), averaged)
    amplitude = float(np.linalg.norm(parts[best])) if spectrum.coordinates == 1 else float(np.linalg.svd(parts[best])[1][0])
    count = fit.parameters + 1 + 2 * spectrum.coordinates
    return _Cycle(Fit(fit.log_likelihood, fit.walk_rad2, fit.noise_rad2, 1.0, count), span / cycles[best], amplitude)


def _waves(spectrum: StepSpectrum, turn_rad: FloatArray) -> FloatArray:
    """Sine-transformed steps of cos and sin of F frequencies, rad per place, shape (K, F, 2)."""
    parts = []
    for first, count in spectrum.runs:
        angle = np.outer(np.arange(first, first + count + 1), turn_rad)
        parts.append(transformed(np.diff(np.stack([np.cos(angle), np.sin(angle)], axis=2), axis=0)))
    return np.concatenate(parts)


def _explained(moved: FloatArray, waves: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Sum of squares that each frequency explains, shape (F,), and its amplitudes, shape (F, 2, C)."""
    normal = np.einsum("kfa,kfb->fab", waves, waves)
    right = np.einsum("kfa,kc->fac", waves, moved)
    parts = np.linalg.solve(normal, right)
    return np.einsum("fac,fac->f", right, parts), parts


def _choice(fits: dict[Motion, Fit], cycle: _Cycle | None, places: int, coordinates: int, interval_s: float) -> MotionChoice:
    size = math.log(places * coordinates)
    criterion = {motion: fit.parameters * size - 2.0 * fit.log_likelihood for motion, fit in fits.items()}
    ranked = sorted(criterion, key=criterion.__getitem__)
    lead = criterion[ranked[1]] - criterion[ranked[0]]
    decided = lead >= DECIDED_FROM
    inertia = fits[Motion.BOUNDED].inertia
    return MotionChoice(
        motion=ranked[0] if decided else Motion.UNDECIDED,
        criterion={motion: value - criterion[ranked[0]] for motion, value in criterion.items()}, lead=lead,
        reason="" if decided else f"{ranked[0]} and {ranked[1]} explain the readings about equally well",
        relaxation_s=-interval_s / math.log(inertia) if 0.0 < inertia < 1.0 else math.nan,
        period_s=math.nan if cycle is None else cycle.period * interval_s,
        amplitude_rad=math.nan if cycle is None else cycle.amplitude_rad, places=places,
    )  # fmt: skip


def _undecided(reason: str) -> MotionChoice:
    return MotionChoice(motion=Motion.UNDECIDED, criterion={}, lead=math.nan, reason=reason, relaxation_s=math.nan,
                        period_s=math.nan, amplitude_rad=math.nan, places=0)  # fmt: skip
