"""All statistics of one tap's night in one call. Source: docs/formulas.md, F-69 and the formulas of each part."""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.stats import chi2

from analysis.drift.allan_confidence import AllanConfidence, confidence_of
from analysis.drift.allan_curve import AllanCurve, modified_allan_deviation, overlapping_allan_deviation
from analysis.drift.diffusion import Diffusion, diffusion_of_steps
from analysis.drift.displacement import Displacement, displacement
from analysis.drift.grid import Grid, means_on_grid, on_grid, typical_interval_s
from analysis.drift.motion import MotionChoice, motion_in_plane, motion_of
from analysis.drift.speed import Speeds, speeds, speeds_of_steps
from analysis.drift.sphere import MeanDirection, Spread, direction_sums, mean_direction, spread
from analysis.drift.summary import Summary, summary_of
from analysis.drift.tangent import developed_steps
from analysis.judge.rule import Quantity
from analysis.quantities import FloatArray, er_db_from_leak
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import is_usable
from analysis.rollup.cells import usable_directions

ER_SHARES: Final = (0.01, 0.05, 0.25, 0.5, 0.75, 0.95, 0.99)
FILLED_SHARE: Final = 0.8  # of the places of a mean, for Allan deviations of a night, which has gaps
_SPACINGS_S: Final = (1.0, 2.0, 5.0, 10.0, 20.0, 30.0, 60.0, 120.0, 300.0, 600.0, 1800.0, 3600.0)
_MOST_PLACES, _MOST_STEPS = 50_000, 1500
_WIDEST_STEP_RAD2: Final = 0.1
_RUN: Final = 150  # places in a row, where a fast state's night is looked at in stretches


@dataclass(frozen=True, slots=True, kw_only=True)
class ErStatistics:
    """Extinction ratio of a night, dB.

    Attributes:
        count: Usable samples. ``lower_bounds``, ``upper_bounds``: of them, those that only bound the ER.
        shares, quantiles_db: Values of rank ceil(q N), bounds at their bound, shape (Q,); NaN without a sample.
        power_mean_db: ER of the summed port powers (F-16); ``leak_mean_db``: ER of the mean leak; NaN where not defined.
    """

    count: int
    lower_bounds: int
    upper_bounds: int
    shares: FloatArray
    quantiles_db: FloatArray
    power_mean_db: float
    leak_mean_db: float


@dataclass(frozen=True, slots=True, kw_only=True)
class NightStatistics:
    """Statistics of one tap from its first to its last reading.

    Attributes:
        start_us, end_us: First and last reading, µs; 0 without one.
        readings: All. ``interval_s``: their median spacing, s, NaN below two.
        er, leak, angle, power: Port ER; other/wanted port; angle from the wanted state, rad; power, W.
        direction, spread: Of single readings; None where the tap gives no direction (two ports).
        place_s: Spacing of the means that ``speeds``, ``displacement`` and the Allan deviations rest on, s.
        speeds: On the sphere; two ports: of the angle alone, which is never faster.
        displacement: None for two ports.
        allan, modified_allan: Of S1, S2, S3 (shape (T, 3)) or of the angle, rad (shape (T,)); means with at least 80 %
            of their places filled. ``allan_confidence``: per component.
        step_s: Spacing of the means that ``diffusion`` and ``motion`` rest on, s.
        diffusion: Random-walk rate; two ports: of the angle alone, as one coordinate.
        motion: Still, Brownian, bounded, cyclic or undecided.
    """

    start_us: int
    end_us: int
    readings: int
    interval_s: float
    er: ErStatistics
    leak: Summary
    angle: Summary
    power: Summary
    direction: MeanDirection | None
    spread: Spread | None
    place_s: float
    speeds: Speeds
    displacement: Displacement | None
    allan: AllanCurve
    allan_confidence: tuple[AllanConfidence, ...]
    modified_allan: AllanCurve
    step_s: float
    diffusion: Diffusion
    motion: MotionChoice


def night_statistics(reduced: Reduced, interval_s: float | None = None) -> NightStatistics:
    """Statistics of one tap's night.

    Args:
        reduced: Samples of one tap, sorted by time, shape (N,). Untrusted values are left out of their quantity.
        interval_s: Nominal spacing, s; the median spacing if left out.
    Raises:
        ValueError: Fewer than two samples and no ``interval_s``, or it is not above 0.
    """
    interval_s = typical_interval_s(reduced.at_us) if interval_s is None else interval_s
    if not interval_s > 0.0:
        raise ValueError(f"interval_s={interval_s!r} must be above 0; name it where there are fewer than two readings.")
    sop = usable_sop(reduced)
    angle_rad = usable_values(reduced, Quantity.ANGLE_DEG, reduced.angle_rad)
    motion = _angle_motion(reduced, angle_rad, interval_s) if sop is None else _sop_motion(reduced, sop, interval_s)
    sums = None if sop is None else direction_sums(sop)
    return NightStatistics(
        start_us=int(reduced.at_us[0]) if len(reduced) else 0, end_us=int(reduced.at_us[-1]) if len(reduced) else 0,
        readings=len(reduced), interval_s=interval_s, er=_er(reduced), leak=summary_of(usable_leak(reduced)),
        angle=summary_of(angle_rad), power=summary_of(usable_values(reduced, Quantity.POWER_W, reduced.power_w)),
        direction=None if sums is None else mean_direction(sums), spread=None if sums is None else spread(sums),
        **motion,
    )  # fmt: skip


def usable_values(reduced: Reduced, quantity: Quantity, values: FloatArray) -> FloatArray:
    """The values, shape (N,), NaN where untrusted."""
    return np.where(is_usable(reduced.trust[quantity], values), values, np.nan)


def usable_sop(reduced: Reduced) -> FloatArray | None:
    """Unit Stokes vectors, shape (N, 3), NaN where untrusted; None where the tap gives none."""
    if reduced.sop is None:
        return None
    usable = usable_directions(reduced)
    return reduced.sop if usable.all() else np.where(usable[:, None], reduced.sop, np.nan)


def usable_leak(reduced: Reduced) -> FloatArray:
    """Other over wanted port, signed, shape (N,), NaN where the ER is untrusted or the wanted port dark."""
    wanted = np.where(reduced.wanted_power > 0.0, reduced.wanted_power, np.nan)
    return np.where(is_usable(reduced.trust[Quantity.ER_DB], reduced.er_db), reduced.other_power / wanted, np.nan)


def _er(reduced: Reduced) -> ErStatistics:
    usable = is_usable(reduced.trust[Quantity.ER_DB], reduced.er_db)
    found, shares = reduced.er_db[usable], np.array(ER_SHARES)
    quantiles = np.quantile(found, shares, method="inverted_cdf") if len(found) else np.full(len(shares), np.nan)
    wanted, other = (float(np.nansum(power[usable])) for power in (reduced.wanted_power, reduced.other_power))
    leak = usable_leak(reduced)
    some = np.isfinite(leak)
    return ErStatistics(
        count=len(found), lower_bounds=int(np.sum(usable & reduced.is_lower_bound)),
        upper_bounds=int(np.sum(usable & reduced.is_upper_bound)), shares=shares, quantiles_db=quantiles,
        power_mean_db=float(er_db_from_leak(other / wanted if wanted > 0.0 else np.nan)),
        leak_mean_db=float(er_db_from_leak(leak[some].mean() if some.any() else np.nan)),
    )  # fmt: skip


def _spacing_s(span_s: float, interval_s: float, most: int) -> float:
    """The interval itself, or the first round spacing above it that cuts the span into at most so many places."""
    if span_s / interval_s <= most:
        return interval_s
    return next((s for s in _SPACINGS_S if s > interval_s and span_s / s <= most), max(span_s / most, interval_s))


def _places(reduced: Reduced, values: FloatArray, interval_s: float, spacing_s: float) -> Grid:
    lay = on_grid if spacing_s == interval_s else means_on_grid
    return lay(reduced.at_us, values, spacing_s)


def _span_s(reduced: Reduced) -> float:
    return float(reduced.at_us[-1] - reduced.at_us[0]) / 1e6 if len(reduced) else 0.0


def _sop_motion(reduced: Reduced, sop: FloatArray, interval_s: float) -> dict:
    place = _places(reduced, sop, interval_s, _spacing_s(_span_s(reduced), interval_s, _MOST_PLACES))
    states = _unit(place.values)
    noise_rad = _noise_rad(states)
    apart = displacement(states, place.interval_s, noise_rad=noise_rad)
    usual_s = _spacing_s(_span_s(reduced), interval_s, _MOST_STEPS)
    step = _places(reduced, sop, interval_s, _short_enough_s(apart, usual_s, interval_s))
    usual = step if step.interval_s == usual_s else _places(reduced, sop, interval_s, usual_s)
    steps = _stretches(developed_steps(_unit(step.values)))
    return _allan(place) | {
        "place_s": place.interval_s, "displacement": apart, "step_s": step.interval_s,
        "speeds": speeds(states, place.interval_s, noise_rad=noise_rad),
        "diffusion": diffusion_of_steps(steps, step.interval_s, averaged=step.averaged),
        "motion": motion_of(_unit(usual.values), usual.interval_s, averaged=usual.averaged),
    }  # fmt: skip


def _angle_motion(reduced: Reduced, angle_rad: FloatArray, interval_s: float) -> dict:
    place = _places(reduced, angle_rad, interval_s, _spacing_s(_span_s(reduced), interval_s, _MOST_PLACES))
    step = _places(reduced, angle_rad, interval_s, _spacing_s(_span_s(reduced), interval_s, _MOST_STEPS))
    moved, position = np.diff(place.values), step.values[:, None]
    return _allan(place) | {
        "place_s": place.interval_s, "displacement": None, "step_s": step.interval_s,
        "speeds": speeds_of_steps(np.abs(moved), place.interval_s, _noise_rad(place.values), coordinates=1),
        "diffusion": diffusion_of_steps(np.diff(position, axis=0), step.interval_s, averaged=step.averaged),
        "motion": motion_in_plane(position, step.interval_s, averaged=step.averaged),
    }  # fmt: skip


def _allan(place: Grid) -> dict:
    curve = overlapping_allan_deviation(place.values, place.interval_s, least_share=FILLED_SHARE)
    columns = [None] if curve.deviation.ndim == 1 else list(range(curve.deviation.shape[1]))
    return {
        "allan": curve, "allan_confidence": tuple(confidence_of(curve, column) for column in columns),
        "modified_allan": modified_allan_deviation(place.values, place.interval_s, least_share=FILLED_SHARE),
    }  # fmt: skip


def _unit(vectors: FloatArray) -> FloatArray:
    length = np.linalg.norm(vectors, axis=1, keepdims=True)
    return vectors / np.where(length > 0.0, length, np.nan)


def _noise_rad(place: FloatArray) -> float:
    """σ of one place per coordinate from its steps over one and two places, rad; 0 where none shows.

    With v the variance of a step's coordinate, 2 σ² = 2 v(1) - v(2), as the walk's share grows with the lag. v by the
    median square, so that a jump or a burst counts as motion, not as noise. Vectors have two coordinates, an angle one.
    """
    coordinates = min(place.ndim, 2)
    variances = []
    for lag in (1, 2):
        step = place[lag:] - place[:-lag]
        square = step**2 if coordinates == 1 else np.einsum("ni,ni->n", step, step)
        square = square[np.isfinite(square)]
        if not len(square):
            return 0.0
        variances.append(float(np.median(square) / chi2.median(coordinates)))
    return math.sqrt(0.5 * max(2.0 * variances[0] - variances[1], 0.0))


def _short_enough_s(apart: Displacement, usual_s: float, interval_s: float) -> float:
    """The usual spacing, or a shorter one where the state moves too far in it."""
    short = apart.tau_s[apart.mean_square_rad2 < _WIDEST_STEP_RAD2]
    return usual_s if not len(short) or short[-1] >= usual_s else float(max(short[-1], interval_s))


def _stretches(steps: FloatArray) -> FloatArray:
    """At most about 1500 steps: where there are more, runs of 150 spread evenly over the night."""
    every = math.ceil(len(steps) / _MOST_STEPS)
    if every < 2:
        return steps
    return np.where(((np.arange(len(steps)) // _RUN) % every == 0)[:, None], steps, np.nan)
