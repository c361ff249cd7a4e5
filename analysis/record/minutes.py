"""A tap's past minute by minute from its rollups, for clearances: no raw reading is opened, whatever the length.

A minute's worst second is the worst of its samples (CONTRACT 5: taps faster than 1 Hz are judged by the worst of a second).
"""

from typing import Any, Final

import numpy as np

from analysis.judge.rule import Quantity
from analysis.outlook.minutes import Air, Minutes
from analysis.quantities import FloatArray, IntArray, angle_between_rad, angle_rad_from_er_db
from analysis.record.rollup_pages import page_columns
from analysis.record.rollup_rows import open_cells
from analysis.reduce.trust import QUANTITIES
from ingest.times import SECOND_US

MINUTE_S: Final = 60
HOUR_S: Final = 3600
ZERO_CELSIUS_K: Final = 273.15
#: Over so many minutes in a row the usual number of samples is told.
USUAL_OVER: Final = 60
_COMMON: Final = ("count", "covered_us", "trusted", "doubtful", "lower_bounds", "er_count", "angle_deg_sum", "angle_count")
_WORST: Final = {Quantity.ER_DB: "er_db_min", Quantity.ANGLE_DEG: "angle_deg_max"}
_AIR: Final = ("temperature_c_min", "temperature_c_max")


def angle_minutes(tap_id: int, quantity: Quantity, from_us: int, until_us: int, *, is_paced: bool = True) -> Minutes:
    """Minutes of a two-port or dark-port tap in the half-open span, as angles.

    Args:
        quantity: What the limit is set on, ER or angle: its judged samples count, and ER is turned into its angle.
        is_paced: The tap declares its interval. If not, samples hold as the usual number a minute of their own time says.
    """
    columns = _columns(tap_id, MINUTE_S, (*_COMMON, _WORST[quantity]), from_us, until_us)
    judged_s, doubtful_s = _judged_s(columns, quantity, is_paced=is_paced)
    is_judged = columns["angle_count"] > 0
    mean_deg = np.where(is_judged, columns["angle_deg_sum"] / np.maximum(columns["angle_count"], 1), np.nan)
    is_bound = (columns["er_count"] > 0) & (columns["lower_bounds"] == columns["er_count"])
    return Minutes(columns["bucket_us"], _worst_rad(columns, quantity), np.radians(mean_deg), judged_s, doubtful_s, is_bound)


def sop_minutes(tap_id: int, quantity: Quantity, from_us: int, until_us: int, wanted: FloatArray, *,
                is_paced: bool = True) -> Minutes:
    """Minutes of a Stokes tap: mean directions, and by how much the worst second was further from the wanted state.

    Args:
        quantity: ER (of all light, so that lost degree of polarization is part of the excess) or angle.
        wanted: Shape (3,). is_paced: As of `angle_minutes`.
    """
    names = (*_COMMON, _WORST[quantity], "sop_sum", "sop_count")
    columns = _columns(tap_id, MINUTE_S, names, from_us, until_us)
    judged_s, doubtful_s = _judged_s(columns, quantity, is_paced=is_paced)
    length = np.linalg.norm(columns["sop_sum"], axis=1)
    has_direction = (columns["sop_count"] > 0) & (length > 0.0)
    state = np.where(has_direction[:, None], columns["sop_sum"] / np.where(has_direction, length, 1.0)[:, None], np.nan)
    excess_rad = np.maximum(_worst_rad(columns, quantity) - angle_between_rad(state, wanted), 0.0)
    judged_s = np.where(has_direction & np.isfinite(excess_rad), judged_s, 0.0)
    no = np.zeros(len(judged_s), dtype=bool)
    return Minutes(columns["bucket_us"], state, state, judged_s, doubtful_s, no, np.nan_to_num(excess_rad))


def air_hours(tap_id: int, from_us: int, until_us: int) -> Air:
    """Lowest and highest temperature of each hour that a tap has some of."""
    columns = _columns(tap_id, HOUR_S, _AIR, from_us - HOUR_S * SECOND_US, until_us)
    low_k, high_k = (columns[name] + ZERO_CELSIUS_K for name in _AIR)
    return Air(columns["bucket_us"], low_k, high_k, HOUR_S * SECOND_US)


def _columns(tap_id: int, level_s: int, names: tuple[str, ...], from_us: int, until_us: int) -> dict[str, Any]:
    """Columns of closed and open days together, cells whose buckets begin in the span, in order of time."""
    parts = []
    for _, page in page_columns([tap_id], level_s, names, from_us, until_us):
        inside = (page["bucket_us"] >= from_us) & (page["bucket_us"] < until_us)
        parts.append({name: page[name][inside] for name in ("bucket_us", *names)})
    rows = open_cells([tap_id], level_s, from_us, until_us)
    parts.append({"bucket_us": rows.bucket_us, **{name: rows.values[name] for name in names}})
    joined = {name: np.concatenate([part[name] for part in parts]) for name in ("bucket_us", *names)}
    order = np.unique(joined["bucket_us"], return_index=True)[1]
    return joined if len(order) == len(joined["bucket_us"]) and np.all(np.diff(order) == 1) else {
        name: values[order] for name, values in joined.items()}


def _judged_s(columns: dict[str, Any], quantity: Quantity, *, is_paced: bool) -> tuple[FloatArray, FloatArray]:
    """Seconds with a judged sample, and of these with a doubtful one: the covered time in proportion to samples.

    Rollups hold samples by the tap's interval of today. Where nobody declared one and the pace was slower in the past, the
    usual number of samples a minute of that time says how long one holds.
    """
    position = QUANTITIES.index(quantity)
    trusted, doubtful = columns["trusted"][:, position], columns["doubtful"][:, position]
    covered_s = columns["covered_us"] / SECOND_US
    per_sample_s = covered_s / np.maximum(columns["count"], 1)
    if not is_paced:
        per_sample_s = np.maximum(per_sample_s, MINUTE_S / _usual_count(columns["count"]))
    longest_s = np.maximum(covered_s, MINUTE_S)
    return np.minimum((trusted + doubtful) * per_sample_s, longest_s), np.minimum(doubtful * per_sample_s, longest_s)


def _usual_count(count: IntArray) -> FloatArray:
    """Median number of samples of each `USUAL_OVER` minutes with readings in a row, for each minute; 1 at least."""
    usual = np.ones(len(count))
    for first in range(0, len(count), USUAL_OVER):
        usual[first:first + USUAL_OVER] = max(float(np.median(count[first:first + USUAL_OVER])), 1.0)
    return usual


def _worst_rad(columns: dict[str, Any], quantity: Quantity) -> FloatArray:
    worst = columns[_WORST[quantity]]
    return angle_rad_from_er_db(worst) if quantity is Quantity.ER_DB else np.radians(worst)
