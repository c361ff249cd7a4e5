"""The only writer of the logbook: entries, edits that keep the old text, configuration changes."""

from datetime import datetime, timedelta
from typing import Any, Final

from django.db import transaction
from django.utils import timezone

from ingest.models import Station, Tap
from labmon.audit.actions import note
from labmon.errors import NotAllowed, WriteError
from labmon.live.publish import publish
from labmon.logbook.models import ChangeKind, ConfigurationChange, LogEntry, LogEntryBefore, LogTag
from labmon.logbook.pictures import Upload, store_picture
from labmon.people.models import Person, Role
from labmon.people.rights import Action, may, owns, require, role_of
from labmon.runs.models import Run

LONGEST_TEXT: Final = 4000
#: An entry may be dated so little ahead of the server's clock: a phone's clock is not the server's.
AHEAD: Final = timedelta(minutes=5)


@transaction.atomic
def write_entry(
    station: Station, *, by: Person, at: datetime, until_at: datetime | None = None, tap: Tap | None = None,
    text: str = "", tag: str = LogTag.NOTE, change: str | None = None, picture: Upload | None = None,
    run: Run | None = None,
) -> LogEntry:
    """An entry about a moment or a span; with ``change`` (a ChangeKind) it is a configuration change too.

    Whether a touch was a configuration change stays open until someone says so (``say_change``).
    Raises:
        NotAllowed: The person may not write in the logbook.
        WriteError: The time, the tag, the tap, the run, the kind or the picture cannot be meant, or an entry says nothing.
    """
    require(by, Action.LOG, station)
    _check(at, until_at, text, tag)
    _check_tap(station, tap)
    _check_run(station, run)
    if not text.strip() and picture is None and tag == LogTag.NOTE:
        raise WriteError("text", "A note without words says nothing.", "Write what happened.")
    if change is not None and change not in ChangeKind.values:
        raise WriteError("change", f"{change!r} is no kind of change.", f"Use one of {', '.join(ChangeKind.values)}.")
    entry = LogEntry.objects.create(
        station=station, tap=tap, run=run, at=at, until_at=until_at, text=text.strip(), tag=tag, by=by,
        was_change=None if tag == LogTag.TOUCHED and change is None else False,
        picture=store_picture(picture) if picture is not None else "",
    )
    note(by, "write log entry", tap or station,
         after={"entry": entry.pk, "at": at, "until_at": until_at, "tag": str(tag), "has_picture": picture is not None})
    if change is not None:
        _store_change(entry, change, by)
    publish({"kind": "logbook", "ids": [station.pk]})
    return entry


@transaction.atomic
def edit_entry(
    entry: LogEntry, *, by: Person, at: datetime, until_at: datetime | None, text: str, tag: str
) -> LogEntry:
    """New words, times or tag; the old ones stay readable. Who wrote the entry may, the bench's owner and managers.

    A configuration change that belongs to the entry moves with its time.
    """
    locked = _locked(entry, by)
    _check(at, until_at, text, tag)
    after = {"at": at, "until_at": until_at, "text": text.strip(), "tag": str(tag)}
    before = {field: getattr(locked, field) for field in after}
    if before == after:
        return locked
    now = timezone.now()
    LogEntryBefore.objects.create(entry=locked, number=locked.befores.count() + 1, edited_by=by, edited_at=now, **before)
    for field, value in after.items():
        setattr(locked, field, value)
    locked.edited_at = now
    locked.save(update_fields=[*after, "edited_at"])
    ConfigurationChange.objects.filter(entry=locked).update(at=at, text=text.strip())
    note(by, "edit log entry", locked.tap or locked.station, {"entry": locked.pk} | before, {"entry": locked.pk} | after)
    publish({"kind": "logbook", "ids": [locked.station_id]})
    return locked


@transaction.atomic
def strike_entry(entry: LogEntry, *, by: Person) -> LogEntry:
    """Strike an entry out: it stays readable, and a configuration change of it cuts nothing any more."""
    locked = _locked(entry, by)
    if locked.struck_at is None:
        locked.struck_at = timezone.now()
        locked.save(update_fields=["struck_at"])
        ConfigurationChange.objects.filter(entry=locked, withdrawn_at=None).update(withdrawn_at=locked.struck_at)
        note(by, "strike log entry", locked.tap or locked.station, {"entry": locked.pk, "is_struck": False},
             {"entry": locked.pk, "is_struck": True})
        publish({"kind": "logbook", "ids": [locked.station_id]})
    return locked


@transaction.atomic
def say_change(entry: LogEntry, kind: str | None, *, by: Person) -> ConfigurationChange | None:
    """Say that an entry was a configuration change of ``kind``, or (None) that it was none after all."""
    locked = _locked(entry, by)
    if kind is not None:
        change = _store_change(locked, kind, by)
    else:
        LogEntry.objects.filter(pk=locked.pk).update(was_change=False)
        change = ConfigurationChange.objects.filter(entry=locked, withdrawn_at=None).first()
        if change is not None:
            change.withdrawn_at = timezone.now()
            change.save(update_fields=["withdrawn_at"])
            note(by, "withdraw configuration change", locked.tap or locked.station, {"kind": change.kind, "at": change.at},
                 {"entry": locked.pk})
    publish({"kind": "logbook", "ids": [locked.station_id]})
    return change


def note_change(
    station: Station, kind: ChangeKind, at: datetime, *, by: Person | None, tap: Tap | None = None, text: str = ""
) -> ConfigurationChange:
    """A change that labmon itself can tell (a new gain, say); call it in the transaction of the write that is the change."""
    return ConfigurationChange.objects.create(station=station, tap=tap, at=at, kind=kind, text=text, by=by)


def may_edit(person: Person, entry: LogEntry) -> bool:
    """Whoever wrote it and still may write here, the bench's owner, a manager."""
    if not may(person, Action.LOG, entry.station):
        return False
    return entry.by_id == person.pk or role_of(person) is Role.MANAGER or owns(person, entry.station)


def _locked(entry: LogEntry, by: Person) -> LogEntry:
    locked = LogEntry.objects.select_for_update(of=("self",)).select_related("station", "tap__station").get(pk=entry.pk)
    require(by, Action.LOG, locked.station)
    if not may_edit(by, locked):
        raise NotAllowed("Only who wrote it, the bench's owner or a manager changes an entry. Write one of your own.")
    return locked


def _store_change(entry: LogEntry, kind: str, by: Person) -> ConfigurationChange:
    if kind not in ChangeKind.values:
        raise WriteError("change", f"{kind!r} is no kind of change.", f"Use one of {', '.join(ChangeKind.values)}.")
    said: dict[str, Any] = {"station": entry.station, "tap": entry.tap, "at": entry.at, "kind": kind, "text": entry.text,
                            "by": by, "withdrawn_at": None}
    change, _ = ConfigurationChange.objects.update_or_create(entry=entry, defaults=said)
    LogEntry.objects.filter(pk=entry.pk).update(was_change=True)
    note(by, "say configuration change", entry.tap or entry.station, after={"entry": entry.pk, "kind": kind, "at": entry.at})
    return change


def _check(at: datetime, until_at: datetime | None, text: str, tag: str) -> None:
    now = timezone.now()
    if at > now + AHEAD or (until_at is not None and until_at > now + AHEAD):
        raise WriteError("at", "The time lies ahead.", "The logbook holds what has been; give a time up to now.")
    if until_at is not None and until_at <= at:
        raise WriteError("until_at", "The span ends before it begins.", "Give a later end, or none for a moment.")
    if len(text) > LONGEST_TEXT:
        raise WriteError("text", f"The text has {len(text)} characters.", f"Keep it to {LONGEST_TEXT}, or write two entries.")
    if "\x00" in text:
        raise WriteError("text", "The text holds a NUL character.", "Leave it out.")
    if tag not in LogTag.values:
        raise WriteError("tag", f"{tag!r} is no tag.", f"Use one of {', '.join(LogTag.values)}.")


def _check_tap(station: Station, tap: Tap | None) -> None:
    if tap is not None and tap.station_id != station.pk:
        raise WriteError("tap", f"{tap.name} is no tap of {station.name}.", "Choose one of this bench, or none.")


def _check_run(station: Station, run: Run | None) -> None:
    if run is not None and not run.taps.filter(station=station).exists():
        do = "Name a run that watches a tap of this bench, or none."
        raise WriteError("run", f"{run.name} does not run on {station.name}.", do)
