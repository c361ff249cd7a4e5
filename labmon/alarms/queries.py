"""Alarms as the list, the API and the plots need them."""

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime

from django.db.models import F, Prefetch, Q, QuerySet

from ingest.times import at_of, us_of
from labmon.alarms.holds import standing_holds
from labmon.alarms.models import Alarm, AlarmBounds, AlarmHold, AlarmKind, AlarmState
from labmon.people.models import Person
from labmon.people.rights import alarms_visible_to, experiments_visible_to, taps_visible_to
from labmon.runs.models import Run

#: Nobody has acknowledged these; those still open first.
WAITING_STATES = (AlarmState.UNACKNOWLEDGED, AlarmState.RETURNED_UNACKNOWLEDGED)
OPEN_STATES = (
    AlarmState.UNACKNOWLEDGED,
    AlarmState.ACKNOWLEDGED,
    AlarmState.SHELVED,
    AlarmState.SUPPRESSED,
    AlarmState.OUT_OF_SERVICE,
)


@dataclass(frozen=True, slots=True)
class AlarmRow:
    """One alarm; ``raised_at`` and ``returned_at`` of limit alarms are data times, of the others server times."""

    id: int
    kind: str
    experiment: str | None
    experiment_id: int | None
    tap: str
    tap_id: int
    station: str
    quantity: str
    level: str
    state: str
    raised_at: datetime
    alarm_at: datetime | None
    returned_at: datetime | None
    acknowledged_at: datetime | None
    acknowledged_by: str | None
    note: str
    value: float | None
    limit: float | None
    cause: str
    message: str
    is_late: bool
    is_withdrawn: bool
    shelved_until: datetime | None
    earlier_bounds: list[tuple[datetime, datetime | None]]
    event_id: int | None = None
    is_drill: bool = False

    @property
    def is_open(self) -> bool:
        """True until it has returned."""
        return self.returned_at is None and not self.is_withdrawn

    @property
    def needs_someone(self) -> bool:
        """True while nobody has acknowledged it."""
        return self.state in (AlarmState.UNACKNOWLEDGED, AlarmState.RETURNED_UNACKNOWLEDGED)


def alarm_rows(
    person: Person,
    *,
    state: str | Iterable[str] | None = None,
    experiment: int | None = None,
    station: str | None = None,
    tap_id: int | None = None,
    is_open: bool | None = None,
    in_run: Run | None = None,
    limit: int = 200,
    before_id: int | None = None,
) -> list[AlarmRow]:
    """Alarms that ``person`` may see: those that need someone first, then the newest; three queries."""
    rows = alarms_visible_to(person)
    if state is not None:
        rows = rows.filter(state__in=[state] if isinstance(state, str) else list(state))
    if experiment is not None:
        rows = rows.filter(experiment_id=experiment)
    if station is not None:
        rows = rows.filter(tap__station__name=station)
    if tap_id is not None:
        rows = rows.filter(tap_id=tap_id)
    if is_open is not None:
        open_ones = Q(returned_at=None, is_withdrawn=False)
        rows = rows.filter(open_ones if is_open else ~open_ones)
    if in_run is not None:
        rows = _open_in(rows, in_run)
    if before_id is not None:
        rows = _behind(rows, before_id)
    return [_row(alarm) for alarm in _loaded(rows).order_by("-raised_at", "-pk")[:limit]]


def waiting_count(person: Person) -> int:
    """How many alarms that ``person`` may see wait for someone."""
    return alarms_visible_to(person).filter(state__in=WAITING_STATES).count()


def _open_in(rows: QuerySet[Alarm], run: Run) -> QuerySet[Alarm]:
    """Alarms of the run's taps that were open in it: of its experiment's limits, and of the readings themselves."""
    of_it = rows.filter(Q(experiment=run.experiment_id) | ~Q(kind=AlarmKind.LIMIT), tap__in=run.run_taps.values("tap"))
    lasted = Q(returned_at=None) | Q(returned_at__gt=run.starts_at)
    return of_it.filter(lasted, raised_at__lt=run.over_at, is_withdrawn=False)


def _behind(rows: QuerySet[Alarm], alarm_id: int) -> QuerySet[Alarm]:
    """Those that stand below an alarm in a list by ``raised_at``; none where there is no such alarm."""
    raised_at = Alarm.objects.filter(pk=alarm_id).values_list("raised_at", flat=True).first()
    if raised_at is None:
        return rows.none()
    return rows.filter(Q(raised_at__lt=raised_at) | Q(raised_at=raised_at, pk__lt=alarm_id))


def alarm_rows_of(rows: QuerySet[Alarm]) -> list[AlarmRow]:
    """The rows of a query, newest first."""
    return [_row(alarm) for alarm in _loaded(rows).order_by("-raised_at", "-pk")]


def alarm_row(alarm_id: int, person: Person) -> AlarmRow | None:
    """One alarm, None if there is none that ``person`` may see."""
    alarm = _loaded(alarms_visible_to(person)).filter(pk=alarm_id).first()
    return _row(alarm) if alarm else None


def _loaded(rows: QuerySet[Alarm]) -> QuerySet[Alarm]:
    return rows.select_related("tap__station", "experiment", "acknowledged_by", "event").prefetch_related(
        Prefetch("earlier_bounds", AlarmBounds.objects.order_by("replaced_at", "pk"))
    )


def _row(alarm: Alarm) -> AlarmRow:
    station = alarm.tap.station.name
    return AlarmRow(
        id=alarm.pk,
        kind=alarm.kind,
        experiment=alarm.experiment.name if alarm.experiment else None,
        experiment_id=alarm.experiment_id,
        tap=f"{station}/{alarm.tap.name}",
        tap_id=alarm.tap_id,
        station=station,
        quantity=alarm.quantity,
        level=alarm.level,
        state=alarm.state,
        raised_at=alarm.raised_at,
        alarm_at=alarm.alarm_at,
        returned_at=alarm.returned_at,
        acknowledged_at=alarm.acknowledged_at,
        acknowledged_by=alarm.acknowledged_by.username if alarm.acknowledged_by else None,
        note=alarm.note,
        value=alarm.value,
        limit=alarm.limit_value,
        cause=alarm.cause,
        message=alarm.message,
        is_late=alarm.is_late,
        is_withdrawn=alarm.is_withdrawn,
        shelved_until=alarm.shelved_until if alarm.state == AlarmState.SHELVED else None,
        earlier_bounds=[(one.raised_at, one.returned_at) for one in alarm.earlier_bounds.all()],
        event_id=alarm.event_id,
        is_drill=alarm.event is not None and alarm.event.is_drill,
    )


def hold_rows(person: Person, *, station: str | None = None) -> list[AlarmHold]:
    """Standing holds that ``person`` may see, those that end first in front; one query."""
    rows = standing_holds().filter(tap__in=taps_visible_to(person))
    rows = rows.filter(Q(limit=None) | Q(limit__experiment__in=experiments_visible_to(person)))
    if station is not None:
        rows = rows.filter(tap__station__name=station)
    return list(rows.select_related("tap__station", "limit__experiment", "by").order_by(F("until").asc(nulls_last=True), "pk"))


def alarm_spans(tap_id: int, from_us: int, until_us: int) -> list[tuple[int, int | None, str, str]]:
    """A tap's alarms that overlap the half-open span, oldest first: (raised µs, returned µs or None, level, quantity).

    Withdrawn ones are left out; alarms that are not of a limit have no quantity.
    """
    rows = Alarm.objects.filter(tap_id=tap_id, raised_at__lt=at_of(until_us), is_withdrawn=False).exclude(
        returned_at__lt=at_of(from_us)
    )
    return [
        (us_of(alarm.raised_at), us_of(alarm.returned_at) if alarm.returned_at else None, alarm.level, alarm.quantity)
        for alarm in rows.order_by("raised_at", "pk")
    ]
