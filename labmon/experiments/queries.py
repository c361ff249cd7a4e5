"""Experiments and their limits as the screens and the API need them."""

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime

from django.db.models import Count, Prefetch, Q
from django.utils import timezone

from analysis.judge.margin import limit_side_by_side
from analysis.judge.rule import Quantity
from analysis.record.calibrations import versions_of
from ingest.models import Tap, TapKind
from labmon.alarms.models import AlarmState
from labmon.experiments.models import Experiment, Limit, LimitVersion
from labmon.people.models import Person
from labmon.people.rights import experiments_visible_to


@dataclass(frozen=True, slots=True)
class VersionRow:
    """One version of a limit."""

    number: int
    valid_from: datetime
    alarm: float
    warning: float | None
    on_delay_s: float
    off_delay_s: float
    deadband: float
    window_s: float | None
    in_runs_only: bool
    is_retired: bool
    set_by: str | None
    consented_by: str | None
    reason: str


@dataclass(frozen=True, slots=True)
class LimitFacts:
    """A limit as it stands now, in dB and degrees side by side, with its history (newest first)."""

    limit_id: int
    experiment_id: int
    experiment: str
    tap_id: int
    tap_name: str
    tap_kind: str
    quantity: str
    alarm: float
    warning: float | None
    alarm_in_db: float | None
    alarm_in_degrees: float | None
    warning_in_db: float | None
    warning_in_degrees: float | None
    on_delay_s: float
    off_delay_s: float
    deadband: float
    window_s: float | None
    in_runs_only: bool
    is_retired: bool
    note: str
    versions: list[VersionRow]


@dataclass(frozen=True, slots=True)
class ExperimentRow:
    """One line of the list of experiments."""

    id: int
    name: str
    owner: str | None
    taps: list[str]
    limits: int
    open_alarms: int
    unacknowledged: int


@dataclass(frozen=True, slots=True)
class ExperimentFacts:
    """All of an experiment's page."""

    id: int
    name: str
    owner: str | None
    owner_id: int | None
    taps: list[Tap]
    no_reading_after_s: float | None
    untrusted_after_s: float
    created_at: datetime
    limits: list[LimitFacts]


def experiment_rows(person: Person) -> list[ExperimentRow]:
    """Experiments that ``person`` may see, by name; a fixed number of queries."""
    open_ones = Q(alarms__returned_at=None, alarms__is_withdrawn=False)
    waiting = Q(alarms__state__in=[AlarmState.UNACKNOWLEDGED, AlarmState.RETURNED_UNACKNOWLEDGED])
    rows = (
        experiments_visible_to(person)
        .select_related("owner")
        .prefetch_related(Prefetch("taps", Tap.objects.select_related("station").order_by("station__name", "name")))
        .annotate(
            open_count=Count("alarms", open_ones, distinct=True),
            waiting_count=Count("alarms", waiting, distinct=True),
            limit_count=Count("limits", distinct=True),
        )
        .order_by("name")
    )
    return [
        ExperimentRow(
            row.pk,
            row.name,
            row.owner.username if row.owner else None,
            [f"{tap.station.name}/{tap.name}" for tap in row.taps.all()],
            row.limit_count,
            row.open_count,
            row.waiting_count,
        )
        for row in rows
    ]


def experiment_facts(experiment: Experiment) -> ExperimentFacts:
    """An experiment with its taps and limits."""
    taps = list(experiment.taps.select_related("station").order_by("station__name", "name"))
    return ExperimentFacts(
        experiment.pk,
        experiment.name,
        experiment.owner.username if experiment.owner else None,
        experiment.owner_id,
        taps,
        experiment.no_reading_after_s,
        experiment.untrusted_after_s,
        experiment.created_at,
        limits_of(Q(experiment=experiment), are_retired_shown=True),
    )


def limits_of(which: Q, *, are_retired_shown: bool = False) -> list[LimitFacts]:
    """Limits that match, by tap and quantity; three queries however many."""
    versions = Prefetch("versions", LimitVersion.objects.select_related("set_by", "consented_by").order_by("-number"))
    limits = (
        Limit.objects.filter(which)
        .select_related("experiment", "tap__station")
        .prefetch_related(versions)
        .order_by("tap__station__name", "tap__name", "quantity", "pk")
    )
    rows = [limit for limit in limits if limit.versions.all()]
    if not are_retired_shown:
        rows = [limit for limit in rows if not limit.versions.all()[0].is_retired]
    without_state = _taps_without_wanted_state(limit.tap for limit in rows)
    hosts = {(limit.experiment_id, limit.tap_id) for limit in rows
             if limit.quantity in (Quantity.ER_DB, Quantity.ANGLE_DEG) and not limit.versions.all()[0].is_retired}
    return [_facts(limit, without_state, hosts) for limit in rows]


def limits_of_tap(tap: Tap) -> list[LimitFacts]:
    """All limits a tap ever had, with their histories."""
    return limits_of(Q(tap=tap), are_retired_shown=True)


def _taps_without_wanted_state(taps: Iterable[Tap]) -> set[int]:
    polarimeters = {tap.pk for tap in taps if tap.kind == TapKind.STOKES}
    if not polarimeters:
        return set()
    versions, now = versions_of(polarimeters), timezone.now()
    known = {pk for pk, own in versions.items() if any(one.wanted_state for one in own if one.valid_from <= now)}
    return polarimeters - known


def _facts(limit: Limit, without_state: set[int], hosts: set[tuple[int, int]]) -> LimitFacts:
    rows = [_version_row(version) for version in limit.versions.all()]
    newest, quantity = rows[0], Quantity(limit.quantity)
    alarm_db, alarm_deg = limit_side_by_side(quantity, newest.alarm)
    warning_db, warning_deg = (None, None) if newest.warning is None else limit_side_by_side(quantity, newest.warning)
    needs_state = limit.tap_id in without_state and quantity in (Quantity.ER_DB, Quantity.ANGLE_DEG)
    note = "Not judged: the tap has no wanted state yet." if needs_state else ""
    if quantity is Quantity.TIME_TO_LIMIT_S and (limit.experiment_id, limit.tap_id) not in hosts:
        note = "Not judged: there is no limit on the extinction ratio or the angle to run towards."
    return LimitFacts(
        limit_id=limit.pk,
        experiment_id=limit.experiment_id,
        experiment=limit.experiment.name,
        tap_id=limit.tap_id,
        tap_name=f"{limit.tap.station.name}/{limit.tap.name}",
        tap_kind=limit.tap.kind,
        quantity=limit.quantity,
        alarm=newest.alarm,
        warning=newest.warning,
        alarm_in_db=alarm_db,
        alarm_in_degrees=alarm_deg,
        warning_in_db=warning_db,
        warning_in_degrees=warning_deg,
        on_delay_s=newest.on_delay_s,
        off_delay_s=newest.off_delay_s,
        deadband=newest.deadband,
        window_s=newest.window_s,
        in_runs_only=newest.in_runs_only,
        is_retired=newest.is_retired,
        note=note,
        versions=rows,
    )


def _version_row(version: LimitVersion) -> VersionRow:
    return VersionRow(
        version.number,
        version.valid_from,
        version.alarm,
        version.warning,
        version.on_delay_s,
        version.off_delay_s,
        version.deadband,
        version.window_s,
        version.in_runs_only,
        version.is_retired,
        version.set_by.username if version.set_by else None,
        version.consented_by.username if version.consented_by else None,
        version.reason,
    )
