"""Benches as the lab page, the station page and the API need them; a fixed number of queries, however many benches."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any, Final

import msgspec
import numpy as np
from django.db import connection
from django.db.models import Q
from django.utils import timezone

from analysis.judge.interval import IntervalState
from analysis.judge.rule import LimitRule, Quantity
from analysis.models import Calibration
from analysis.record.calibrations import versions_of
from analysis.record.tap_state import TapState
from ingest.door.client import PREFIX as CLIENT_PREFIX
from ingest.models import DoorUp, Room, SetAside, Station, StationBoot, StationKey, Tap, TapKind
from ingest.store.columns import Readings
from ingest.store.read import newest_readings
from ingest.times import SECOND_US, at_of
from ingest.times import now_us as server_now_us
from labmon.alarms.models import AlarmState
from labmon.benches.ceilings import TapCeiling, ceiling_of
from labmon.benches.course import Course, courses_of
from labmon.benches.door_facts import DoorFacts, door_facts
from labmon.benches.doubts import OpenDoubt, open_doubts
from labmon.benches.models import Bench
from labmon.benches.show import (
    DEFAULT_SILENCE_S,
    WORST_FIRST,
    BenchState,
    NowSample,
    ShownMargin,
    Silence,
    now_sample,
    shown_margin,
    silences_of,
    smallest,
    state_of_tap,
)
from labmon.benches.troubles import NO_TROUBLES, Troubles, troubles_of
from labmon.experiments.models import LimitVersion
from labmon.experiments.queries import LimitFacts, limits_of
from labmon.experiments.rules import rule_of
from labmon.people.models import Person
from labmon.people.rights import stations_visible_to

#: Door spans older than this do not count for silence any more.
DOOR_MEMORY_US: Final = 8 * 86_400 * SECOND_US
#: Readings of a tap that its clock's course and its ceiling are told by: ten minutes at one a second.
NEWEST_LOOKED_AT: Final = 600
#: A door gives a sign of life each second; one whose last is no older than this is up.
DOOR_SIGN_US: Final = 3 * SECOND_US


@dataclass(frozen=True, slots=True)
class BenchRow:
    """One line of the lab page: a bench by its worst tap."""

    station: str
    room: str | None
    purpose: str
    owner: str | None
    state: str
    tap: str | None
    kind: str | None
    quantity: str | None
    value: float | None
    er_db: float | None
    er_is_lower_bound: bool
    er_is_upper_bound: bool
    angle_deg: float | None
    angle_is_upper_bound: bool
    margin_db: float | None
    margin_deg: float | None
    margin_is_bound: bool
    limit_quantity: str | None
    limit_alarm: float | None
    trust: str
    reasons: list[str]
    last_heard_at: datetime | None
    silent_s: float | None
    is_silent: bool
    open_alarms: int
    unacknowledged: int
    sparkline: Course | None


@dataclass(frozen=True, slots=True)
class TapFacts:
    """One tap of a station's page."""

    id: int
    name: str
    kind: str
    unit: str
    interval_s: float | None
    now: NowSample | None
    limits: list[LimitFacts]
    margins: list[ShownMargin]
    margin: ShownMargin | None
    state: str
    last_heard_at: datetime | None
    silent_s: float | None
    is_silent: bool
    calibration: Calibration | None
    unknown_columns: list[str]
    has_stokes: bool
    ceiling: TapCeiling | None = None
    is_mute: bool = False
    """It gives nothing while its station lives."""
    names_itself_mute: bool = False
    """The station's program says that its instrument does not answer."""


@dataclass(frozen=True, slots=True)
class StationFacts:
    """All of a station's page. ``boots`` are newest first; ``set_aside`` counts readings that could not be used."""

    station: Station
    room: str | None
    owner: str | None
    owner_id: int | None
    purpose: str
    taps: list[TapFacts]
    keys: list[StationKey]
    boots: list[StationBoot]
    last_heard_at: datetime | None
    set_aside: int
    troubles: Troubles = NO_TROUBLES
    doubts: list[OpenDoubt] = field(default_factory=list)
    door: DoorFacts = DoorFacts()


@dataclass(frozen=True, slots=True)
class _Known:
    """What the database says of some taps, by tap id."""

    now: Mapping[int, tuple[int, dict[str, Any], TapState]]
    rules: Mapping[int, list[tuple[int, LimitRule]]]
    silences: Mapping[int, Silence]


@dataclass(frozen=True, slots=True)
class _Standing:
    """One tap, judged for showing."""

    tap: Tap
    sample: NowSample | None
    margins: list[ShownMargin]
    margin: ShownMargin | None
    silence: Silence | None
    state: BenchState


def bench_rows(person: Person, *, now_us: int | None = None) -> list[BenchRow]:
    """Benches that ``person`` may see, worst first, then by margin."""
    clock_us = server_now_us() if now_us is None else now_us
    stations = list(stations_visible_to(person).select_related("room", "bench__owner").order_by("name"))
    by_station: dict[int, list[Tap]] = {}
    for tap in Tap.objects.filter(station__in=[station.pk for station in stations]).select_related("heard").order_by("name"):
        by_station.setdefault(tap.station_id, []).append(tap)
    standings = _standings([tap for taps in by_station.values() for tap in taps], clock_us)
    worst = {station_id: _worst([standings[tap.pk] for tap in taps]) for station_id, taps in by_station.items()}
    courses = courses_of(
        {one.tap.pk: one.margin.quantity if one.margin else _main_quantity(one.tap) for one in worst.values()}, clock_us
    )
    alarms = _alarm_counts([station.pk for station in stations])
    rows = [
        (
            worst.get(station.pk),
            _bench_row(
                station, by_station.get(station.pk, []), worst.get(station.pk), courses, alarms.get(station.pk, (0, 0)), clock_us
            ),
        )
        for station in stations
    ]
    rows.sort(key=lambda pair: (*_rank(pair[0]), pair[1].station))
    return [row for _, row in rows]


def _bench_row(
    station: Station,
    taps: Sequence[Tap],
    worst: _Standing | None,
    courses: Mapping[int, Course],
    alarms: tuple[int, int],
    now_us: int,
) -> BenchRow:
    bench = getattr(station, "bench", None)
    sample, margin = (worst.sample, worst.margin) if worst else (None, None)
    heard_us = max((tap.heard.last_arrival_us for tap in taps if hasattr(tap, "heard")), default=None)
    quantity = margin.quantity if margin else (_main_quantity(worst.tap) if worst else None)
    verdict = sample.trust_by_quantity.get(quantity or "", {}) if sample else {}
    return BenchRow(
        station=station.name,
        room=station.room.name if station.room else None,
        purpose=bench.purpose if bench else "",
        owner=bench.owner.username if bench and bench.owner else None,
        state=worst.state.value if worst else BenchState.NEVER.value,
        tap=worst.tap.name if worst else None,
        kind=worst.tap.kind if worst else None,
        quantity=quantity,
        value=sample.value(quantity) if sample and quantity else None,
        er_db=sample.er_db if sample else None,
        er_is_lower_bound=bool(sample and sample.is_lower_bound),
        er_is_upper_bound=bool(sample and sample.is_upper_bound),
        angle_deg=sample.angle_deg if sample else None,
        angle_is_upper_bound=bool(sample and sample.angle_is_upper_bound),
        margin_db=margin.margin_db if margin else None,
        margin_deg=margin.margin_deg if margin else None,
        margin_is_bound=bool(margin and margin.is_bound),
        limit_quantity=margin.quantity if margin else None,
        limit_alarm=margin.alarm if margin else None,
        trust=verdict.get("trust", "none"),
        reasons=list(verdict.get("reasons", [])),
        last_heard_at=at_of(heard_us) if heard_us is not None else None,
        silent_s=None if heard_us is None else max((now_us - heard_us) / 1e6, 0.0),
        is_silent=bool(worst and worst.silence and worst.silence.is_shown),
        open_alarms=alarms[0],
        unacknowledged=alarms[1],
        sparkline=courses.get(worst.tap.pk) if worst else None,
    )


def station_facts(station: Station, *, now_us: int | None = None) -> StationFacts:
    """Everything on a station's page."""
    clock_us = server_now_us() if now_us is None else now_us
    taps = list(station.taps.select_related("heard").order_by("name"))
    standings = _standings(taps, clock_us)
    limits: dict[int, list[LimitFacts]] = {}
    for limit in limits_of(Q(tap__station=station)):
        limits.setdefault(limit.tap_id, []).append(limit)
    now, versions = timezone.now(), versions_of(tap.pk for tap in taps)
    in_force = {tap_id: next((one for one in reversed(own) if one.valid_from <= now), None) for tap_id, own in versions.items()}
    newest = newest_readings([tap.pk for tap in taps], count=NEWEST_LOOKED_AT)
    boots = list(station.boots.order_by("-last_arrival_us")[:10])
    door = door_facts(station, boots, clock_us)
    heard_us = max((tap.heard.last_arrival_us for tap in taps if hasattr(tap, "heard")), default=None)
    bench = getattr(station, "bench", None)
    return StationFacts(
        station=station,
        room=station.room.name if station.room else None,
        owner=bench.owner.username if bench and bench.owner else None,
        owner_id=bench.owner_id if bench else None,
        purpose=bench.purpose if bench else "",
        taps=[_tap_facts(standings[tap.pk], limits.get(tap.pk, []), in_force.get(tap.pk), newest[tap.pk], clock_us, door)
              for tap in taps],
        keys=list(station.keys.select_related("use").order_by("-made_at")),
        boots=boots,
        troubles=troubles_of(station, newest, clock_us),
        doubts=open_doubts(station, in_force),
        door=door,
        last_heard_at=at_of(heard_us) if heard_us is not None else None,
        set_aside=SetAside.objects.filter(station=station).count(),
    )


def _tap_facts(
    standing: _Standing, limits: list[LimitFacts], calibration: Calibration | None, newest: Readings, now_us: int, door: DoorFacts
) -> TapFacts:
    tap = standing.tap
    heard_us = tap.heard.last_arrival_us if hasattr(tap, "heard") else None
    is_silent, is_named = bool(standing.silence and standing.silence.is_shown), door.names_mute(tap.name, now_us)
    return TapFacts(
        id=tap.pk,
        name=tap.name,
        kind=tap.kind,
        unit=tap.unit,
        interval_s=tap.interval_s,
        now=standing.sample,
        limits=limits,
        margins=standing.margins,
        margin=standing.margin,
        state=standing.state.value,
        last_heard_at=at_of(heard_us) if heard_us is not None else None,
        silent_s=None if heard_us is None else max((now_us - heard_us) / 1e6, 0.0),
        is_silent=is_silent,
        calibration=calibration,
        unknown_columns=[name for name in tap.unknown_columns if not name.startswith(CLIENT_PREFIX)],
        has_stokes=tap.kind == TapKind.STOKES,
        ceiling=ceiling_of(tap, calibration, newest),
        is_mute=is_named or (is_silent and heard_us is not None and door.is_mute(heard_us, now_us)),
        names_itself_mute=is_named,
    )


def now_of(tap: Tap, *, now_us: int | None = None) -> NowSample | None:
    """The newest reduced sample of a tap; None before its first."""
    found = _now_rows([tap.pk]).get(tap.pk)
    return None if found is None else now_sample(found[0], found[1], server_now_us() if now_us is None else now_us)


def now_samples(tap_ids: Sequence[int], now_us: int) -> dict[int, NowSample]:
    """The newest reduced sample of each tap that has one; one query."""
    return {tap_id: now_sample(at_us, sample, now_us) for tap_id, (at_us, sample, _) in _now_rows(tap_ids).items()}


def aside_rows(station: Station, *, before_id: int | None = None, limit: int = 100) -> list[SetAside]:
    """Readings of a station that could not be used, newest first; ``before_id`` pages on."""
    rows = SetAside.objects.filter(station=station).select_related("tap")
    if before_id is not None:
        rows = rows.filter(pk__lt=before_id)
    return list(rows.order_by("-pk")[:limit])


def silences_now(taps: Sequence[Tap], now_us: int) -> dict[int, Silence]:
    """Silence of each tap that was ever heard (``tap.heard`` loaded); a fixed number of queries."""
    return dict(_known(taps, now_us).silences)


def _standings(taps: Sequence[Tap], now_us: int) -> dict[int, _Standing]:
    known = _known(taps, now_us)
    found = {}
    for tap in taps:
        row = known.now.get(tap.pk)
        sample = now_sample(row[0], row[1], now_us) if row else None
        margins = [shown_margin(limit_id, rule, sample) for limit_id, rule in known.rules.get(tap.pk, [])]
        silence = known.silences.get(tap.pk)
        found[tap.pk] = _Standing(tap, sample, margins, smallest(margins), silence, state_of_tap(margins, sample, silence))
    return found


def _known(taps: Sequence[Tap], now_us: int) -> _Known:
    ids = [tap.pk for tap in taps]
    now = _now_rows(ids)
    heard = [(tap, now[tap.pk][2] if tap.pk in now else None, tap.heard.last_arrival_us) for tap in taps if hasattr(tap, "heard")]
    return _Known(now, rules_now(ids), silences_of(heard, call_after_s(ids), door_spans(now_us), now_us))


def _now_rows(tap_ids: Sequence[int]) -> dict[int, tuple[int, dict[str, Any], TapState]]:
    """Per tap the newest sample's time and facts, and of its state what tells how often it is heard (the rest is long)."""
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT tap_id, at_us, sample::text, (trust_state->'interval')::text, (trust_state->'arrivals_us')::text
            FROM analysis_tapnow WHERE tap_id = ANY(%s)""",
            [list(tap_ids)],
        )
        return {
            tap_id: (at_us, msgspec.json.decode(sample), _heard_state(interval, arrivals_us))
            for tap_id, at_us, sample, interval, arrivals_us in cursor.fetchall()
        }


def _heard_state(interval: str | None, arrivals_us: str | None) -> TapState:
    spacings = IntervalState.from_json(interval and msgspec.json.decode(interval))
    return TapState(interval=spacings, arrivals_us=tuple(msgspec.json.decode(arrivals_us or "[]")))


def rules_now(tap_ids: Sequence[int]) -> dict[int, list[tuple[int, LimitRule]]]:
    """Per tap the limits in force now on what a sample has: (limit id, rule)."""
    versions = (
        LimitVersion.objects.filter(limit__tap_id__in=list(tap_ids), valid_from__lte=timezone.now())
        .select_related("limit")
        .order_by("limit_id", "-number")
        .distinct("limit_id")
    )
    found: dict[int, list[tuple[int, LimitRule]]] = {}
    for version in versions:
        if not version.is_retired and not Quantity(version.limit.quantity).is_derived:
            found.setdefault(version.limit.tap_id, []).append((version.limit_id, rule_of(version, version.limit.quantity)))
    return found


def call_after_s(tap_ids: Sequence[int]) -> dict[int, float]:
    """Per watched tap the silence after which someone is called: the shortest of its experiments, s."""
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT link.tap_id, min(coalesce(experiment.no_reading_after_s, %s))
            FROM labmon_experiment_taps link JOIN labmon_experiment experiment ON experiment.id = link.experiment_id
            WHERE link.tap_id = ANY(%s) GROUP BY link.tap_id""",
            [DEFAULT_SILENCE_S, list(tap_ids)],
        )
        return dict(cursor.fetchall())


def door_spans(now_us: int) -> Any:
    """Spans in which a door was up, µs, shape (K, 2), joined and sorted; the last of a living door reaches to now."""
    rows = DoorUp.objects.filter(until_us__gte=now_us - DOOR_MEMORY_US).order_by("from_us").values_list("from_us", "until_us")
    joined: list[list[int]] = []
    for from_us, until_us in rows:
        if joined and from_us <= joined[-1][1]:
            joined[-1][1] = max(joined[-1][1], until_us)
        else:
            joined.append([from_us, until_us])
    if joined and joined[-1][1] >= now_us - DOOR_SIGN_US:
        joined[-1][1] = max(joined[-1][1], now_us)
    return np.array(joined, dtype=np.int64).reshape(-1, 2)


def _alarm_counts(station_ids: Sequence[int]) -> dict[int, tuple[int, int]]:
    """Per station open alarms, and alarms that nobody has acknowledged."""
    waiting = [AlarmState.UNACKNOWLEDGED.value, AlarmState.RETURNED_UNACKNOWLEDGED.value]
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT tap.station_id, count(*) FILTER (WHERE alarm.returned_at IS NULL AND NOT alarm.is_withdrawn),
                count(*) FILTER (WHERE alarm.state = ANY(%s))
            FROM labmon_alarm alarm JOIN ingest_tap tap ON tap.id = alarm.tap_id
            WHERE alarm.state <> 'normal' AND tap.station_id = ANY(%s) GROUP BY tap.station_id""",
            [waiting, list(station_ids)],
        )
        return {station_id: (is_open, unacknowledged) for station_id, is_open, unacknowledged in cursor.fetchall()}


def _main_quantity(tap: Tap) -> str:
    return "temperature_c" if tap.kind == TapKind.CLIMATE else "er_db"


def _worst(standings: Sequence[_Standing]) -> _Standing:
    """The tap a bench is shown by; a room's sensor only where there is nothing else."""
    return min(standings, key=lambda one: (one.tap.kind == TapKind.CLIMATE and one.state is not BenchState.SILENT, *_rank(one)))


def _rank(standing: _Standing | None) -> tuple[int, float]:
    if standing is None:
        return len(WORST_FIRST), float("inf")
    margin = standing.margin
    nearness = (
        margin.margin_deg
        if margin and margin.margin_deg is not None
        else margin.margin_db
        if margin and margin.margin_db is not None
        else None
    )
    return WORST_FIRST.index(standing.state), float("inf") if nearness is None else nearness


def shared_names() -> dict[str, list[str]]:
    """Names that benches already share, by kind of thing, to choose from; two queries."""
    found: dict[str, set[str]] = {"room": set(Room.objects.values_list("name", flat=True))}
    kinds = ("laser", "logger", "network")
    for row in Bench.objects.values(*kinds):
        for kind in kinds:
            found.setdefault(kind, set()).add(row[kind])
    return {kind: sorted(names - {""}) for kind, names in found.items()}
