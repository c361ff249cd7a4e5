"""Statistics of a tap as plain JSON values: units in the names, angles in degrees, None where a figure is not known."""

import math
from typing import Any

import numpy as np

from analysis.drift.arc_leak import LeakArc
from analysis.drift.arc_sphere import SphereArc
from analysis.drift.night import ER_SHARES, NightStatistics
from analysis.drift.summary import Summary
from analysis.drift.tap_statistics import MeanError, TapStatistics
from analysis.drift.temperature import TemperatureResponse
from analysis.drift.trend import Trend

_DEG = 180.0 / math.pi


def statistics_facts(found: TapStatistics) -> dict[str, Any]:
    """The members that the API's answer and a stored day share."""
    night = found.night
    return {
        "er": _er(found), "leak": _summary(night.leak, found.leak_error),
        "angle_deg": _summary(night.angle, found.angle_error, _DEG), "power_w": _summary(night.power, found.power_error),
        "direction": _direction(night), "speed": _speed(night), "displacement": _displacement(night), "allan": _allan(night),
        "drift_model": _drift_model(night),
        "trend": {"angle_deg_per_day": _trend(found.angle_trend), "leak_db_per_day": _trend(found.leak_trend)},
        "temperature_response": _response(found.response), "thermal_arc": _arc(found.arc),
    }  # fmt: skip


def plain(value: Any) -> Any:
    """A number or array as JSON takes it: what is not finite is None."""
    if isinstance(value, np.ndarray):
        return [plain(one) for one in value.tolist()]
    if isinstance(value, (list, tuple)):
        return [plain(one) for one in value]
    if isinstance(value, np.generic):
        value = value.item()
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _facts(**members: Any) -> dict[str, Any]:
    return {name: plain(value) for name, value in members.items()}


def _er(found: TapStatistics) -> dict[str, Any]:
    er = found.night.er
    return _facts(
        count=er.count, lower_bounds=er.lower_bounds, upper_bounds=er.upper_bounds, shares=list(ER_SHARES),
        quantiles_db=er.quantiles_db, power_mean_db=er.power_mean_db, leak_mean_db=er.leak_mean_db,
        leak_mean_low_db=found.leak_mean_low_db, leak_mean_high_db=found.leak_mean_high_db, level=0.95,
        effective_count=found.leak_error.effective,
    )  # fmt: skip


def _summary(summary: Summary, error: MeanError, scale: float = 1.0) -> dict[str, Any]:
    if not summary.count:
        return _facts(count=0, mean=None, standard_error=None, effective_count=None, sd=None, min=None, median=None, max=None)
    median = float(summary.quantiles(np.array([0.5]))[0])
    return _facts(
        count=summary.count, mean=scale * summary.mean, standard_error=scale * error.standard_error,
        effective_count=error.effective, sd=scale * summary.sd, min=scale * summary.min, median=scale * median,
        max=scale * summary.max,
    )  # fmt: skip


def _direction(night: NightStatistics) -> dict[str, Any] | None:
    """Mean state and spread; ``independent_cone_deg`` and the concentration take readings as independent (F-45, F-47)."""
    mean, spread = night.direction, night.spread
    if mean is None or spread is None or not mean.count:
        return None
    minor, major = (_DEG * math.sqrt(max(float(square), 0.0)) for square in spread.tangent_rad2)
    return _facts(
        count=mean.count, state=mean.direction, mean_resultant=mean.mean_resultant, concentration=mean.concentration,
        concentration_low=mean.concentration_low, concentration_high=mean.concentration_high, level=mean.level,
        independent_cone_deg=_DEG * mean.cone_rad, spread_major_deg=major, spread_minor_deg=minor,
    )  # fmt: skip


def _speed(night: NightStatistics) -> dict[str, Any]:
    speeds = night.speeds
    return _facts(
        over_s=speeds.over_s, count=speeds.count, shares=list(speeds.shares), raw_deg_per_s=_DEG * np.asarray(speeds.raw),
        net_deg_per_s=_DEG * np.asarray(speeds.net), rms_net_deg_per_s=_DEG * speeds.rms_net, noise_deg_per_s=_DEG * speeds.noise,
        noise_share=speeds.noise_share,
    )  # fmt: skip


def _displacement(night: NightStatistics) -> dict[str, Any] | None:
    apart = night.displacement
    if apart is None:
        return None
    return _facts(tau_s=apart.tau_s, mean_square_rad2=apart.mean_square_rad2, net_rad2=apart.net_rad2,
                  noise_rad2=apart.noise_rad2, mean_cosine=apart.mean_cosine, pairs=apart.pairs)  # fmt: skip


def _allan(night: NightStatistics) -> dict[str, Any]:
    """One curve per component: Stokes components, or the angle in rad."""
    curve, modified = night.allan, night.modified_allan
    columns = _columns(curve.deviation)
    names = ["s1", "s2", "s3"] if len(columns) == 3 else ["angle_rad"]
    return {
        "place_s": plain(night.place_s), "tau_s": plain(curve.tau_s), "terms": plain(curve.terms), "level": 0.95,
        "curves": [
            _facts(component=name, deviation=column, low=sure.low, high=sure.high, edf=sure.edf,
                   noise=[one.value for one in sure.noise])
            for name, column, sure in zip(names, columns, night.allan_confidence, strict=True)
        ],
        "modified": {
            "tau_s": plain(modified.tau_s), "terms": plain(modified.terms),
            "deviation": [plain(column) for column in _columns(modified.deviation)],
        },
    }  # fmt: skip


def _columns(deviation: np.ndarray) -> list[np.ndarray]:
    return [deviation] if deviation.ndim == 1 else list(deviation.T)


def _drift_model(night: NightStatistics) -> dict[str, Any]:
    motion, walk = night.motion, night.diffusion
    decorrelation, low, high = walk.decorrelation_s
    return _facts(
        motion=motion.motion.value, reason=motion.reason, lead=motion.lead,
        relaxation_s=motion.relaxation_s, period_s=motion.period_s, amplitude_deg=_DEG * motion.amplitude_rad,
        places=motion.places, step_s=night.step_s, diffusion_rad2_per_s=walk.diffusion,
        diffusion_low_rad2_per_s=walk.diffusion_low, diffusion_high_rad2_per_s=walk.diffusion_high,
        decorrelation_s=decorrelation, decorrelation_low_s=low, decorrelation_high_s=high,
        noise_deg=_DEG * walk.noise_rad, steps=walk.steps, level=walk.level,
    ) | {"criterion": {model.value: plain(float(value)) for model, value in motion.criterion.items()}}  # fmt: skip


def _trend(found: Trend) -> dict[str, Any]:
    return _facts(verdict=found.verdict.value, per_day=found.per_day, low_per_day=found.low_per_day,
                  high_per_day=found.high_per_day, level=0.95, bins=found.bins, effective_bins=found.effective_bins)  # fmt: skip


def _response(found: TemperatureResponse | None) -> dict[str, Any] | None:
    if found is None:
        return None
    return _facts(
        verdict=found.verdict.value, angle_deg_per_k=found.per_k, standard_error=found.per_k_se, lag_s=found.lag_s,
        lag_low_s=found.lag_low_s, lag_high_s=found.lag_high_s, level=0.95, correlation=found.correlation, chance=found.chance,
        pairs=found.pairs, effective_pairs=found.effective_pairs,
    )  # fmt: skip


def _arc(found: LeakArc | SphereArc | None) -> dict[str, Any] | None:
    if found is None:
        return None
    is_leak = isinstance(found, LeakArc)
    nothing = math.nan
    return _facts(
        seen_as="leak" if is_leak else "sphere", verdict=found.verdict.value, worst_er_db=found.worst.er_db,
        worst_er_low_db=found.worst.low_db, worst_er_high_db=found.worst.high_db, level=0.95, best_er_db=found.best_er_db,
        seen_er_db=found.seen_er_db, half_arc_deg=_DEG * found.half_arc_rad, readings=found.readings,
        kappa_rad_per_k=found.kappa_rad_per_k if is_leak else nothing,
        kappa_low_rad_per_k=found.kappa_low_rad_per_k if is_leak else nothing,
        kappa_high_rad_per_k=found.kappa_high_rad_per_k if is_leak else nothing,
        radius_deg=nothing if is_leak else _DEG * found.radius_rad, inflation=found.inflation,
    )  # fmt: skip
