"""How far a value is inside its limit, in dB and in degrees on the sphere. Source: docs/formulas.md, F-15."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import FloatArray, angle_rad_from_er_db, db_from_ratio, er_db_from_angle_rad


@dataclass(frozen=True, slots=True)
class Margin:
    """Positive inside; NaN where it has no meaning. ``is_at_least``: the value was a bound, so it is at least this."""

    margin_db: FloatArray
    margin_deg: FloatArray
    is_at_least: Any


def margin_of(quantity: Quantity, value: Any, alarm: Any, *, is_bound: Any = False) -> Margin:
    """Margin of values against the alarm level, any broadcastable shapes.

    ER: er - alarm, and the difference of the two angles. Angle: ER(angle) - ER(alarm angle), and alarm - angle.
    Power: 10 log10(P / P_alarm), no degrees. DOP: neither.

    Args:
        value, alarm: In the quantity's unit (dB, degrees, ratio, W).
        is_bound: True where the value is a bound on its good side (ER lower bound, angle upper bound).
    """
    value, alarm = np.asarray(value, dtype=np.float64), np.asarray(alarm, dtype=np.float64)
    nothing = np.full(np.broadcast_shapes(value.shape, alarm.shape), np.nan)
    if quantity is Quantity.ER_DB:
        margin_deg = np.degrees(angle_rad_from_er_db(alarm) - angle_rad_from_er_db(value))
        return Margin(value - alarm, margin_deg, is_bound)
    if quantity is Quantity.ANGLE_DEG:
        margin_db = er_db_from_angle_rad(np.radians(value)) - er_db_from_angle_rad(np.radians(alarm))
        return Margin(margin_db, alarm - value, is_bound)
    if quantity is Quantity.POWER_W:
        both = (value > 0.0) & (alarm > 0.0)
        return Margin(db_from_ratio(np.where(both, value, np.nan) / np.where(both, alarm, np.nan)), nothing, is_bound)
    return Margin(nothing, nothing, is_bound)


def smallest_margin(margins: list[Margin]) -> Margin | None:
    """The margin that a bench shows: of the limits that are passed, else of all, the smallest in degrees (dB where none has)."""
    passed = [margin for margin in margins if margin.margin_db < 0.0 or margin.margin_deg < 0.0]
    for name in ("margin_deg", "margin_db"):
        known = [margin for margin in passed or margins if np.isfinite(getattr(margin, name))]
        if known:
            return min(known, key=lambda margin: float(getattr(margin, name)))
    return None


def limit_side_by_side(quantity: Quantity, level: float) -> tuple[float | None, float | None]:
    """An ER or angle limit as (dB, degrees on the sphere); (None, None) for other quantities."""
    if quantity is Quantity.ER_DB:
        return level, float(np.degrees(angle_rad_from_er_db(level)))
    if quantity is Quantity.ANGLE_DEG:
        return float(er_db_from_angle_rad(np.radians(level))), level
    return None, None
