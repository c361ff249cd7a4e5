"""All benches over one night, from rollups: as many queries for two hundred benches as for two."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from analysis.judge.margin import margin_of
from analysis.judge.rule import Quantity
from analysis.quantities import FloatArray, IntArray, angle_rad_from_er_db, er_db_from_angle_rad
from analysis.record.rollup_pages import page_columns
from analysis.record.rollup_rows import open_cells
from analysis.record.rollups import mean_names, means_of_cells
from analysis.reduce.trust import QUANTITIES
from labmon.alarms.models import Alarm
from labmon.experiments.models import LimitVersion
from labmon.overnight.nights import Night
from labmon.people.models import Person
from labmon.people.rights import alarms_visible_to, taps_visible_to

BUCKET_S: Final = 600
BUCKET_US: Final = BUCKET_S * 1_000_000
USUAL_NIGHTS: Final = 14
HOUR_S: Final = 3600
DAY_US: Final = 86_400_000_000
#: Less of a bucket trusted, or covered at all, is drawn as untrusted or missing (our own choice).
ENOUGH: Final = 0.5
MARGIN_QUANTITIES = (Quantity.ER_DB.value, Quantity.ANGLE_DEG.value)


@dataclass(frozen=True, slots=True)
class BenchNight:
    """One tap's night against one limit, in buckets of 10 min, shape (B,) each, NaN where nothing was judged.

    Attributes:
        least_db, mean_db: Margin of the worst and of the mean reading, dB above the limit.
        covered, trusted: Share of each bucket with readings, and with trusted ones.
        usual_db: Median of the least margins (of hours) of the nights before, dB; None where fewer than three are known.
        usual_low_db: The least of them.
        alarms: What called or would have called, as (raised_us, kind, level, cause).
    """

    station: str
    tap: str
    experiment: str
    experiment_id: int
    quantity: str
    alarm: float
    least_db: FloatArray
    mean_db: FloatArray
    covered: FloatArray
    trusted: FloatArray
    usual_db: float | None
    usual_low_db: float | None
    usual_nights: int
    alarms: tuple[Alarm, ...]

    @property
    def worst_db(self) -> float | None:
        """Smallest margin of the night."""
        known = self.least_db[np.isfinite(self.least_db)]
        return float(known.min()) if len(known) else None

    @property
    def mean_angle_deg(self) -> FloatArray:
        """Angle on the sphere of each bucket's mean leak (its mean angle, where that is limited); NaN: nothing judged."""
        is_er = self.quantity == Quantity.ER_DB
        limit_er_db = self.alarm if is_er else float(er_db_from_angle_rad(np.radians(self.alarm)))
        return np.degrees(angle_rad_from_er_db(limit_er_db + self.mean_db))

    @property
    def worst_bucket(self) -> int | None:
        """Where it was."""
        return int(np.nanargmin(self.least_db)) if np.isfinite(self.least_db).any() else None


def bench_nights(person: Person, night: Night) -> list[BenchNight]:
    """Every limited tap that ``person`` may see, worst first; benches without a judged reading come last."""
    versions = _limits(person, night)
    quantities = {one.limit.tap_id: one.limit.quantity for one in versions}
    cells = _columns(quantities, BUCKET_S, night.from_us, night.until_us)
    hours = _columns(quantities, HOUR_S, night.from_us - USUAL_NIGHTS * DAY_US, night.from_us)
    alarms = _alarms(person, list(quantities), night)
    rows = [_row(one, night, cells.get(one.limit.tap_id, {}), hours.get(one.limit.tap_id, {}), alarms) for one in versions]
    return sorted(rows, key=lambda row: (row.worst_db is None, row.worst_db or 0.0, row.station, row.tap))


def _limits(person: Person, night: Night) -> list[LimitVersion]:
    """For each tap the limit on ER, else on the angle, that was in force when the night ended."""
    newest = LimitVersion.objects.filter(
        limit__tap__in=taps_visible_to(person), limit__quantity__in=MARGIN_QUANTITIES, valid_from__lt=night.until_at
    ).order_by("limit_id", "-number").distinct("limit_id").select_related("limit__tap__station", "limit__experiment")
    chosen: dict[int, LimitVersion] = {}
    for one in sorted((one for one in newest if not one.is_retired), key=lambda one: MARGIN_QUANTITIES.index(one.limit.quantity)):
        chosen.setdefault(one.limit.tap_id, one)
    return list(chosen.values())


def _columns(quantities: Mapping[int, str], level_s: int, from_us: int, until_us: int) -> dict[int, dict[str, Any]]:
    """Cells of each tap in the span, as columns: closed days' pages and open rows together."""
    ids = list(quantities)
    wanted = [name for quantity in quantities.values() for name in _names(quantity)]
    names = list(dict.fromkeys([*wanted, "covered_us", "trusted_us"]))
    if not ids:
        return {}
    parts: dict[int, list[dict[str, Any]]] = {}
    first_us = from_us // (level_s * 1_000_000) * (level_s * 1_000_000)
    for tap_id, columns in page_columns(ids, level_s, names, first_us, until_us):
        parts.setdefault(tap_id, []).append(columns)
    rows = open_cells(ids, level_s, first_us, until_us)
    owners, begins = np.unique(rows.tap, return_index=True)
    for tap_id, begin, end in zip(owners.tolist(), begins.tolist(), np.append(begins, len(rows))[1:].tolist(), strict=True):
        parts.setdefault(tap_id, []).append({"bucket_us": rows.bucket_us[begin:end],
                                             **{name: rows.values[name][begin:end] for name in names}})
    return {tap_id: _joined(found, first_us, until_us) for tap_id, found in parts.items()}


def _joined(parts: list[dict[str, Any]], from_us: int, until_us: int) -> dict[str, Any]:
    whole = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    inside = (whole["bucket_us"] >= from_us) & (whole["bucket_us"] < until_us)
    return {name: values[inside] for name, values in whole.items()}


def _names(quantity: str) -> tuple[str, ...]:
    worst = "angle_deg_max" if quantity == Quantity.ANGLE_DEG else "er_db_min"
    return (worst, *mean_names(quantity))


def _row(version: LimitVersion, night: Night, cells: dict[str, Any], hours: dict[str, Any],
         alarms: dict[int, list[Alarm]]) -> BenchNight:
    limit, quantity = version.limit, Quantity(version.limit.quantity)
    first_us = night.from_us // BUCKET_US * BUCKET_US
    count = -(-(night.until_us - first_us) // BUCKET_US)
    least_db, mean_db = np.full(count, np.nan), np.full(count, np.nan)
    covered, trusted = np.zeros(count), np.zeros(count)
    if cells:
        place: IntArray = (cells["bucket_us"] - first_us) // BUCKET_US
        least_db[place] = _margin_db(quantity, cells[_names(quantity)[0]], version.alarm)
        mean_db[place] = _margin_db(quantity, means_of_cells(quantity.value, cells), version.alarm)
        covered[place] = cells["covered_us"] / BUCKET_US
        trusted[place] = cells["trusted_us"][:, QUANTITIES.index(quantity)] / BUCKET_US
    usual = _usual(quantity, version.alarm, night, hours)
    return BenchNight(
        limit.tap.station.name, limit.tap.name, limit.experiment.name, limit.experiment_id, limit.quantity, version.alarm,
        least_db, mean_db, np.clip(covered, 0.0, 1.0), np.clip(trusted, 0.0, 1.0),
        float(np.median(usual)) if len(usual) >= 3 else None, float(np.min(usual)) if len(usual) >= 3 else None, len(usual),
        tuple(one for one in alarms.get(limit.tap_id, ()) if one.experiment_id in (None, limit.experiment_id)))


def _margin_db(quantity: Quantity, values: Any, alarm: float) -> FloatArray:
    values = np.asarray(values, dtype=np.float64)
    return margin_of(quantity, np.where(np.isfinite(values), values, np.nan), alarm).margin_db


def _usual(quantity: Quantity, alarm: float, night: Night, hours: dict[str, Any]) -> FloatArray:
    """Least margin of each earlier night with readings, against the same limit, from hours."""
    if not hours:
        return np.zeros(0)
    margins = _margin_db(quantity, hours[_names(quantity)[0]], alarm)
    back = (night.from_us - hours["bucket_us"] + DAY_US - 1) // DAY_US
    within = (hours["bucket_us"] - night.from_us + back * DAY_US) < night.until_us - night.from_us
    found = [float(np.nanmin(chosen)) for day in range(1, USUAL_NIGHTS + 1)
             if np.isfinite(chosen := margins[(back == day) & within]).any()]
    return np.array(found)


def _alarms(person: Person, tap_ids: list[int], night: Night) -> dict[int, list[Alarm]]:
    """Alarms of the night by tap; one query."""
    rows = alarms_visible_to(person).filter(tap__in=tap_ids, raised_at__gte=night.from_at, raised_at__lt=night.until_at)
    found: dict[int, list[Alarm]] = {}
    for one in rows.order_by("raised_at"):
        found.setdefault(one.tap_id, []).append(one)
    return found
