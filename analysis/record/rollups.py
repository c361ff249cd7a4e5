"""The curves of a history picture: from raw readings for short spans, else from the level of rollups that fits its width."""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import FloatArray, IntArray, db_from_ratio
from analysis.record.reduce_span import find_samples
from analysis.record.rollup_pages import page_columns
from analysis.record.rollup_rows import open_cells
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import QUANTITIES, Trust, is_usable
from analysis.rollup.cells import AIR, LEVELS_S
from ingest.models import Tap
from ingest.times import SECOND_US

#: Spans up to this are read raw: they would have too few 10 s buckets, and the newest seconds are not rolled up yet.
RAW_UP_TO_S: Final = 3600.0
#: A level serves a picture if it has at least this share of the points that were asked for.
ENOUGH: Final = 0.5


@dataclass(frozen=True, slots=True)
class History:
    """Curves of at most the asked number of buckets, oldest first; buckets without any sample are NaN (a gap).

    Attributes:
        bucket_s: Length of a bucket. ``at_us``: where each starts, shape (M,), evenly spaced.
        min, mean, max: In the quantity's unit (degrees for the angle); the mean of ER is that of the summed powers.
        trusted_share: Share of the bucket covered by trusted samples; 0 in a gap.
    """

    bucket_s: float
    at_us: IntArray
    min: FloatArray
    mean: FloatArray
    max: FloatArray
    trusted_share: FloatArray


@dataclass(frozen=True, slots=True)
class _Sums:
    """What adds up, per cell or sample: start, extremes, weighted sum and weight (of ER the two port sums), trusted µs."""

    at_us: IntArray
    low: FloatArray
    high: FloatArray
    total: FloatArray
    weight: FloatArray
    trusted_us: FloatArray


def history(tap_id: int, quantity: str, from_us: int, until_us: int, points: int = 2000) -> History:
    """Curves of ``er_db``, ``angle_deg``, ``dop``, ``power_w``, ``temperature_c``, ``humidity_pct`` or ``pressure_hpa``.

    Raises:
        ValueError: The quantity is unknown, the span is empty, or ``points`` is below 1.
    """
    known = [*(one.value for one in QUANTITIES), *AIR]
    if quantity not in known:
        raise ValueError(f"{quantity!r} has no history; use one of {', '.join(known)}.")
    if until_us <= from_us or points < 1:
        raise ValueError("A history needs an end behind its start, and at least one point.")
    span_s = (until_us - from_us) / SECOND_US
    level_s = level_for(span_s, points)
    if level_s is None:
        bucket_us = max(-(-(until_us - from_us) // points), 1)
        first_us = from_us // bucket_us * bucket_us
        samples, holes = find_samples(Tap.objects.get(pk=tap_id), first_us, until_us)
        if holes:
            level_s = LEVELS_S[0]  # the finest rollups are still there
        else:
            sums = _from_samples(samples, quantity)
    if level_s is not None:
        bucket_us = max(-(-round(span_s) // (level_s * points)), 1) * level_s * SECOND_US
        first_us = from_us // bucket_us * bucket_us
        sums = _from_cells(tap_id, quantity, level_s, first_us, until_us)
    count = min(-(-(until_us - first_us) // bucket_us), points + 1)
    return _binned(sums, quantity, first_us, bucket_us, count)


def level_for(span_s: float, points: int) -> int | None:
    """The rollup level for a span, s: the coarsest that has enough buckets for ``points``; None for raw readings.

    So at most 12 cells are read for each point, however long the span (half the points suffice, and a level has at most 24
    cells for one of the next).
    """
    if span_s <= RAW_UP_TO_S:
        return None
    return next((level_s for level_s in reversed(LEVELS_S) if span_s / level_s >= ENOUGH * points), LEVELS_S[0])


def _names(quantity: str) -> tuple[str, ...]:
    ends = (f"{quantity}_min", f"{quantity}_max")
    match quantity:
        case "er_db":
            return (*ends, "wanted_sum", "other_sum", "trusted_us")
        case "angle_deg":
            return (*ends, "angle_deg_sum", "angle_count", "trusted_us")
        case "dop":
            return (*ends, "dop_sum", "dop_count", "trusted_us")
        case "power_w":
            return (*ends, "power_w_mean", "power_w_count", "trusted_us")
    return (*ends, f"{quantity}_mean", f"{quantity}_count", "covered_us")


def mean_names(quantity: str) -> tuple[str, ...]:
    """The columns of a cell that its mean of a quantity is made from."""
    return _names(quantity)[2:4]


def means_of_cells(quantity: str, columns: dict[str, Any]) -> FloatArray:
    """Mean of each cell from the columns `mean_names`, NaN where there is none; of ER that of the summed powers."""
    total, weight = (np.asarray(columns[name], dtype=np.float64) for name in mean_names(quantity))
    is_sum = quantity in ("er_db", "angle_deg", "dop")
    return _mean(quantity, total if is_sum else total * weight, weight)


def _from_cells(tap_id: int, quantity: str, level_s: int, from_us: int, until_us: int) -> _Sums:
    names = _names(quantity)
    columns = [found for _, found in page_columns([tap_id], level_s, names, from_us, until_us)]
    rows = open_cells([tap_id], level_s, from_us, until_us)
    columns.append({"bucket_us": rows.bucket_us, **{name: rows.values[name] for name in names}})
    at_us = np.concatenate([one["bucket_us"] for one in columns])
    inside = (at_us >= from_us) & (at_us < until_us)
    joined = {name: np.concatenate([one[name] for one in columns])[inside] for name in names}
    return _sums_of(at_us[inside], quantity, joined)


def _sums_of(at_us: IntArray, quantity: str, columns: dict[str, Any]) -> _Sums:
    low, high, total, weight, covered = (columns[name] for name in _names(quantity))
    if quantity in ("er_db", "angle_deg", "dop"):
        trusted_us = covered[:, QUANTITIES.index(Quantity(quantity))]
        return _Sums(at_us, low, high, total, weight.astype(float), trusted_us.astype(float))
    trusted_us = covered[:, QUANTITIES.index(Quantity.POWER_W)] if quantity == "power_w" else np.where(weight > 0, covered, 0)
    return _Sums(at_us, low, high, total * weight, weight.astype(float), trusted_us.astype(float))


def _from_samples(samples: Reduced, quantity: str) -> _Sums:
    hold_us = np.diff(samples.at_us, append=samples.at_us[-1:])
    hold_us = np.minimum(hold_us, 3 * np.median(hold_us[:-1])) if len(hold_us) > 1 else hold_us
    if len(hold_us) > 1:
        hold_us[-1] = np.median(hold_us[:-1])
    if quantity in AIR:
        value = getattr(samples, quantity)
        good = trusted = np.isfinite(value)
    else:
        value, trust = samples.values(Quantity(quantity)), samples.trust[Quantity(quantity)]
        good = is_usable(trust, value)
        trusted = good & (trust == Trust.TRUSTED)
    shown = np.where(good, value, np.nan)
    if quantity == "er_db":
        has_powers = good & np.isfinite(samples.wanted_power)
        total, weight = np.where(has_powers, samples.wanted_power, 0.0), np.where(has_powers, samples.other_power, 0.0)
    else:
        total, weight = np.where(good, value, 0.0), good.astype(float)
    return _Sums(samples.at_us, shown, shown, total, weight, np.where(trusted, hold_us, 0.0).astype(float))


def _binned(sums: _Sums, quantity: str, first_us: int, bucket_us: int, count: int) -> History:
    bins = (sums.at_us - first_us) // bucket_us
    low, high, mean = (np.full(count, np.nan) for _ in range(3))
    share = np.zeros(count)
    order = np.argsort(bins, kind="stable")
    inside = order[(bins[order] >= 0) & (bins[order] < count)]
    if len(inside):
        own = bins[inside]
        starts = np.flatnonzero(np.diff(own, prepend=-1))
        filled = own[starts]
        low[filled], high[filled] = np.fmin.reduceat(sums.low[inside], starts), np.fmax.reduceat(sums.high[inside], starts)
        total, weight = np.add.reduceat(sums.total[inside], starts), np.add.reduceat(sums.weight[inside], starts)
        mean[filled] = _mean(quantity, total, weight)
        share[filled] = np.minimum(np.add.reduceat(sums.trusted_us[inside], starts) / bucket_us, 1.0)
    return History(bucket_us / SECOND_US, first_us + np.arange(count) * bucket_us, low, mean, high, share)


def _mean(quantity: str, total: FloatArray, weight: FloatArray) -> FloatArray:
    has_any = weight > 0
    if quantity == "er_db":
        has_any &= total > 0
        return db_from_ratio(np.where(has_any, total, np.nan) / np.where(has_any, weight, np.nan))
    return np.where(has_any, total / np.where(has_any, weight, 1.0), np.nan)
