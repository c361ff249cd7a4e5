"""Reading the logbook: a bench's entries, what a plot marks, and which changes cut a bench's history."""

from collections.abc import Collection
from dataclasses import dataclass
from datetime import datetime

from django.db.models import Count, F, Q, QuerySet

from ingest.models import Station, Tap
from labmon.logbook.models import ConfigurationChange, LogEntry
from labmon.people.models import Person
from labmon.people.rights import stations_visible_to
from labmon.runs.models import Run

MOST_MARKS = 200


@dataclass(frozen=True, slots=True)
class LogMark:
    """What a plot draws of an entry, or of a change that labmon noted by itself (``entry_id`` is then None)."""

    at: datetime
    until_at: datetime | None
    station: str
    tap: str | None
    tag: str
    text: str
    change: str | None
    entry_id: int | None


def configuration_changes(tap_or_station: Tap | Station, since: datetime) -> list[datetime]:
    """When the configuration changed from ``since`` on, oldest first, each time once.

    Of a tap: its own changes and those of the whole bench. Of a station: all of them. Withdrawn ones do not count.
    """
    changes = ConfigurationChange.objects.filter(at__gte=since, withdrawn_at=None)
    if isinstance(tap_or_station, Tap):
        changes = changes.filter(Q(tap=None) | Q(tap=tap_or_station), station_id=tap_or_station.station_id)
    else:
        changes = changes.filter(station=tap_or_station)
    return list(changes.order_by("at").values_list("at", flat=True).distinct())


def configuration_changes_of(taps: Collection[Tap], since: datetime) -> dict[int, list[datetime]]:
    """The same for many taps, by tap id; one query."""
    rows = list(
        ConfigurationChange.objects.filter(station__in={tap.station_id for tap in taps}, at__gte=since, withdrawn_at=None)
        .order_by("at").values_list("station_id", "tap_id", "at")
    )
    return {
        tap.pk: list(dict.fromkeys(at for station_id, tap_id, at in rows
                                   if station_id == tap.station_id and tap_id in (None, tap.pk)))
        for tap in taps
    }


def newest_change(station: Station) -> ConfigurationChange | None:
    """The last change of a bench that counts."""
    return ConfigurationChange.objects.filter(station=station, withdrawn_at=None).order_by("-at", "-pk").first()


def entries_visible_to(person: Person) -> QuerySet[LogEntry]:
    """Entries of visible benches."""
    return LogEntry.objects.filter(station__in=stations_visible_to(person))


def log_entries(
    person: Person, *, stations: Collection[str] = (), tag: str = "", from_at: datetime | None = None,
    until_at: datetime | None = None, before_id: int | None = None, limit: int = 50,
) -> list[LogEntry]:
    """Newest first by what they are about; ``before_id`` pages on from that entry. Struck ones too. One or two queries."""
    rows = entries_visible_to(person)
    if stations:
        rows = rows.filter(station__name__in=stations)
    if tag:
        rows = rows.filter(tag=tag)
    if until_at is not None:
        rows = rows.filter(at__lt=until_at)
    if from_at is not None:
        rows = rows.filter(Q(at__gte=from_at) | Q(until_at__gt=from_at))
    if before_id is not None:
        rows = _behind(rows, before_id)
    return list(loaded(rows).order_by("-at", "-pk")[:limit])


def entries_of_run(person: Person, run: Run, *, limit: int = 50) -> list[LogEntry]:
    """What was written about the run, or about the time of it on its benches; newest first. One query."""
    meanwhile = Q(at__gte=run.starts_at) | Q(until_at__gt=run.starts_at)
    of_its_benches = Q(station__in=run.taps.values("station")) & Q(at__lt=run.over_at) & meanwhile
    rows = entries_visible_to(person).filter(Q(run=run) | of_its_benches)
    return list(loaded(rows).order_by("-at", "-pk")[:limit])


def loaded(rows: QuerySet[LogEntry]) -> QuerySet[LogEntry]:
    """With all that showing an entry needs."""
    return rows.select_related("station__bench", "tap", "run", "by", "change").annotate(edits=Count("befores"))


def _behind(rows: QuerySet[LogEntry], entry_id: int) -> QuerySet[LogEntry]:
    at = LogEntry.objects.filter(pk=entry_id).values_list("at", flat=True).first()
    return rows.none() if at is None else rows.filter(Q(at__lt=at) | Q(at=at, pk__lt=entry_id))


def marks_of(taps: Collection[Tap], from_at: datetime, until_at: datetime) -> list[LogMark]:
    """Entries about these taps or their benches that touch the span, oldest first; two queries. The newest of a crowd stay."""
    about = Q(station__in={tap.station_id for tap in taps}) & (Q(tap=None) | Q(tap__in=taps))
    entries = (
        LogEntry.objects.filter(about, Q(at__gte=from_at) | Q(until_at__gt=from_at), at__lt=until_at, struck_at=None)
        .select_related("station", "tap", "change").order_by("-at", "-pk")[:MOST_MARKS]
    )
    noted = (
        ConfigurationChange.objects.filter(about, entry=None, withdrawn_at=None, at__gte=from_at, at__lt=until_at)
        .annotate(station_name=F("station__name"), tap_name=F("tap__name")).order_by("-at", "-pk")[:MOST_MARKS]
    )
    marks = [_mark_of_entry(entry) for entry in entries]
    marks += [LogMark(one.at, None, one.station_name, one.tap_name, "", one.text, one.kind, None) for one in noted]
    return sorted(marks, key=lambda mark: mark.at)


def _mark_of_entry(entry: LogEntry) -> LogMark:
    return LogMark(entry.at, entry.until_at, entry.station.name, entry.tap.name if entry.tap else None, entry.tag, entry.text,
                   standing_kind(entry), entry.pk)


def standing_kind(entry: LogEntry) -> str | None:
    """Which kind of configuration change the entry was, None where it was none."""
    change = getattr(entry, "change", None)
    return change.kind if change is not None and change.withdrawn_at is None else None
