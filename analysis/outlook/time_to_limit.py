"""Time to the limit, on the angle in degrees: half of the futures, and one in ten, have reached it by then.

ER is turned into its angle first: a falling ER is a rising angle, its margin in dB is no margin (40 → 30 dB is 2.5°, 25 → 20 dB
is 5°), and a walk is a walk in degrees. Near the wanted state an angle cannot fall below 0: a walk of the angle that starts
within its own hourly spread of 0 is a poor picture of the sphere, and replay (`clearance`) is the better guide.
"""

from dataclasses import dataclass
from enum import StrEnum
from itertools import product
from typing import Final

import numpy as np
from scipy.special import ndtri

from analysis.outlook.binomial import LEVEL
from analysis.outlook.drift_model import DriftModel, ModelChoice, choose_model
from analysis.outlook.drifted_walk import discrete_shift, passage_probability, passage_quantile_s
from analysis.outlook.fit_reverting import RevertingFit
from analysis.outlook.fit_walk import WalkFit
from analysis.outlook.mean_reverting import is_steady_pull, reverting_passage
from analysis.quantities import FloatArray, angle_rad_from_er_db

MEDIAN, TENTH = 0.5, 0.1
FAR_SD = 6.0
"""So many standard deviations below its mean a level comes back by the same way each time."""
#: A barrier so many spreads above the mean is reached after e^200 relaxation times: never, and numbers overflow on the way.
NEVER_SD: Final = 20.0


class Outlook(StrEnum):
    """What can be said about the time to the limit."""

    WITHIN = "reached within the horizon by half of the futures"
    POSSIBLE = "reached within the horizon by one in ten of the futures"
    NOT_WITHIN = "no limit reached within the horizon"
    BEYOND = "beyond the limit now"
    TOO_SHORT = "too few readings"


@dataclass(frozen=True, slots=True)
class TimeBand:
    """Quantile of the time to the limit, s, with the range that the parameters' 95 % intervals allow; inf: beyond the horizon."""

    time_s: float
    low_s: float
    high_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class TimeToLimit:
    """The answer.

    Attributes:
        outlook: In a word. median, tenth: By when half and a tenth of the futures have reached the limit.
        reached: Chance to have reached it within the horizon; NaN where nothing can be said.
        horizon_s: How far was looked, s. margin_deg: Limit minus the last angle, degrees.
        choice: Model, evidence and parameters; None where there were too few readings.
    """

    outlook: Outlook
    median: TimeBand
    tenth: TimeBand
    reached: float
    horizon_s: float
    margin_deg: float
    choice: ModelChoice | None


def time_to_limit(at_s: FloatArray, angle_deg: FloatArray, limit_deg: float, *, horizon_s: float,
                  sampling_s: float = 0.0) -> TimeToLimit:
    """Time until the angle reaches its limit from below.

    Args:
        at_s: Times, s, shape (N,), rising. angle_deg: Angle from the wanted state, degrees, shape (N,); NaN rows are left out.
        limit_deg: The limit, degrees in (0, 180].
        horizon_s: How far to look, s; nothing is said beyond. No further than the record is long is wise.
        sampling_s: Step at which the limit will be watched, s; moves the limit out by 0.5826 σ √step. 0: without a break.
    Returns:
        `TimeToLimit`. Bands are the extremes over the corners of the parameters' 95 % intervals (walk: drift and spread;
        turning back: mean and rate), which errs to the wide side.
    Raises:
        ValueError: Limit, horizon or step out of range, or times do not rise.
    Source: docs/formulas.md, F-95 to F-103.
    """
    if not (0.0 < limit_deg <= 180.0 and 0.0 < horizon_s < np.inf and sampling_s >= 0.0):
        raise ValueError(f"limit_deg={limit_deg!r} must lie in (0, 180], horizon_s={horizon_s!r} s be above 0 and finite, "
                         f"sampling_s={sampling_s!r} s not below 0.")
    at_s, angle_deg = np.asarray(at_s, np.float64), np.asarray(angle_deg, np.float64)
    is_finite = np.isfinite(at_s) & np.isfinite(angle_deg)
    last_deg = float(angle_deg[is_finite][-1]) if is_finite.any() else float("nan")
    if last_deg > limit_deg:
        return _said(Outlook.BEYOND, TimeBand(0.0, 0.0, 0.0), TimeBand(0.0, 0.0, 0.0), 1.0, horizon_s, limit_deg - last_deg, None)
    if np.count_nonzero(is_finite) < 3:
        none = TimeBand(float("nan"), float("nan"), float("nan"))
        return _said(Outlook.TOO_SHORT, none, none, float("nan"), horizon_s, limit_deg - last_deg, None)
    choice = choose_model(at_s, angle_deg)
    if choice.model is DriftModel.WALK or choice.reverting is None:
        median, tenth, reached = _by_walk(choice.walk, limit_deg - last_deg, horizon_s, sampling_s)
    else:
        median, tenth, reached = _by_reverting(choice.reverting, last_deg, limit_deg, horizon_s, sampling_s)
    outlook = Outlook.POSSIBLE if np.isfinite(tenth.time_s) else Outlook.NOT_WITHIN
    outlook = Outlook.WITHIN if np.isfinite(median.time_s) else outlook
    return _said(outlook, median, tenth, reached, horizon_s, limit_deg - last_deg, choice)


def time_to_er_limit(at_s: FloatArray, er_db: FloatArray, limit_db: float, *, horizon_s: float,
                     sampling_s: float = 0.0) -> TimeToLimit:
    """As `time_to_limit`, for an ER that must not fall below ``limit_db``: worked in angle, so that falling is rising.

    Args:
        er_db: dB, shape (N,); readings that are only a bound should be NaN. limit_db: dB. Source: docs/formulas.md, F-02, F-103.
    """
    return time_to_limit(at_s, np.degrees(angle_rad_from_er_db(er_db)), float(np.degrees(angle_rad_from_er_db(limit_db))),
                         horizon_s=horizon_s, sampling_s=sampling_s)


def _said(outlook: Outlook, median: TimeBand, tenth: TimeBand, reached: float, horizon_s: float, margin_deg: float,
          choice: ModelChoice | None) -> TimeToLimit:
    return TimeToLimit(outlook=outlook, median=median, tenth=tenth, reached=reached, horizon_s=horizon_s, margin_deg=margin_deg,
                       choice=choice)


def _by_walk(fit: WalkFit, margin_deg: float, horizon_s: float, sampling_s: float) -> tuple[TimeBand, TimeBand, float]:
    away = _deviate()
    drift = fit.drift_per_s + fit.drift_error * np.array([0.0, -away, -away, away, away])
    spread = np.maximum([fit.spread, fit.spread_low, fit.spread_high, fit.spread_low, fit.spread_high],
                        1e-12 * max(abs(fit.drift_per_s), margin_deg / horizon_s) * np.sqrt(horizon_s))
    distance = margin_deg + discrete_shift(spread, sampling_s)
    bands = [_band(passage_quantile_s(distance, drift, spread, share), horizon_s) for share in (MEDIAN, TENTH)]
    return bands[0], bands[1], float(passage_probability(distance[0], drift[0], spread[0], horizon_s))


def _by_reverting(fit: RevertingFit, last_deg: float, limit_deg: float, horizon_s: float,
                  sampling_s: float) -> tuple[TimeBand, TimeBand, float]:
    away = _deviate()
    corners = [(0.0, 0.0), *product((-away, away), repeat=2)]
    times, reached = [], float("nan")
    for number, (mean_off, rate_off) in enumerate(corners):
        rate = fit.rate_per_s * float(np.exp(rate_off * fit.rate_log_error))
        sd = fit.sd * float(np.sqrt(fit.rate_per_s / rate))     # σ = sd √(2 rate) is well known: it is kept
        shift = float(discrete_shift(fit.sd * np.sqrt(2.0 * fit.rate_per_s), sampling_s))
        barrier_deg = max(limit_deg + shift, last_deg + 1e-9 * sd)
        quantiles_s, chance = _reverting_times(last_deg, barrier_deg, fit.mean + mean_off * fit.mean_error, rate, sd, horizon_s)
        times.append(quantiles_s)
        reached = chance if number == 0 else reached
    return _band(np.array(times)[:, 0], horizon_s), _band(np.array(times)[:, 1], horizon_s), reached


def _reverting_times(last_deg: float, barrier_deg: float, mean: float, rate: float, sd: float,
                     horizon_s: float) -> tuple[FloatArray, float]:
    """Median and tenth, s, and the chance within the horizon."""
    if barrier_deg - mean > NEVER_SD * sd and barrier_deg - last_deg > FAR_SD * sd:
        return np.full(2, np.inf), 0.0
    if is_steady_pull(last_deg, barrier_deg, mean, sd) and mean > barrier_deg:
        way_deg = barrier_deg - last_deg
        drift = rate * way_deg / float(np.log((mean - last_deg) / (mean - barrier_deg)))
        spread = sd * float(np.sqrt(2.0 * rate))
        return (passage_quantile_s(way_deg, drift, spread, [MEDIAN, TENTH]),
                float(passage_probability(way_deg, drift, spread, horizon_s)))
    late_s = 0.0
    if is_steady_pull(last_deg, barrier_deg, mean, sd):         # far below the mean: the first part of the way is sure
        late_s = float(np.log((mean - last_deg) / (FAR_SD * sd))) / rate
        last_deg = mean - FAR_SD * sd
    law = reverting_passage(last_deg, barrier_deg, mean, rate, sd)
    return late_s + law.quantile_s([MEDIAN, TENTH], horizon_s=horizon_s), float(law.probability(max(horizon_s - late_s, 0.0)))


def _band(times_s: FloatArray, horizon_s: float) -> TimeBand:
    """Band from the time at the fitted parameters (first) and at their corners."""
    times_s = np.where(times_s > horizon_s, np.inf, times_s)
    return TimeBand(float(times_s[0]), float(times_s.min()), float(times_s.max()))


def _deviate() -> float:
    return float(ndtri(0.5 + 0.5 * LEVEL))
