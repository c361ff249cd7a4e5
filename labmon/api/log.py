"""The logbook: entries of a bench, read, written, edited and struck out."""

from datetime import datetime
from typing import Any

from django.http import HttpRequest, HttpResponse
from django.utils import timezone

from ingest.models import Station
from labmon.api.answer import json_answer
from labmon.api.body import Body, LongText, Text, body_of
from labmon.api.named import tap_path
from labmon.api.problem import not_found, wrong_field
from labmon.api.query import known_only, one_of, span_of, whole_number
from labmon.api.times import parse_time, rfc3339
from labmon.logbook.actions import edit_entry, say_change, strike_entry, write_entry
from labmon.logbook.authors import author_of
from labmon.logbook.models import LogEntry, LogTag
from labmon.logbook.queries import entries_visible_to, loaded, log_entries, standing_kind
from labmon.people.models import Person
from labmon.people.rights import Action, require, stations_visible_to

LARGEST_ID = 2**63 - 1


def get_log(request: HttpRequest, person: Person, station: str) -> HttpResponse:
    """Entries of a bench, newest first; ``before`` leads on."""
    known_only(request.GET, "span", "tag", "before", "count")
    found = _station_named(person, station)
    span = span_of(request.GET) if request.GET.get("span") else None
    count = whole_number(request.GET, "count", default=100, most=1000)
    rows = log_entries(
        person, stations=[found.name], limit=count,
        tag=one_of(request.GET, "tag", LogTag.values, default=""),
        from_at=span.from_at if span else None, until_at=span.until_at if span else None,
        before_id=whole_number(request.GET, "before", default=0, least=0, most=LARGEST_ID) or None,
    )
    return json_answer({"entries": [entry_facts(row, person) for row in rows],
                        "before": rows[-1].pk if len(rows) == count else None})


def entry_facts(entry: LogEntry, person: Person) -> dict[str, Any]:
    """An entry as the document names it."""
    return {"id": entry.pk, "station": entry.station.name, "tap": tap_path(entry.tap) if entry.tap else None,
            "at": rfc3339(entry.at), "until": rfc3339(entry.until_at), "text": entry.text, "tag": entry.tag,
            "configuration_change": standing_kind(entry), "was_change": entry.was_change, "by": author_of(entry, person),
            "written_at": rfc3339(entry.written_at), "edited_at": rfc3339(entry.edited_at),
            "struck_at": rfc3339(entry.struck_at), "has_picture": bool(entry.picture),
            "earlier": [{"at": rfc3339(one.at), "until": rfc3339(one.until_at), "text": one.text, "tag": one.tag,
                         "edited_at": rfc3339(one.edited_at)}
                        for one in (entry.befores.order_by("number") if entry.edited_at else [])]}


class NewEntry(Body):
    """The body of POST …/log."""

    text: LongText = ""
    tag: Text = LogTag.NOTE.value
    at: Text | None = None
    until: Text | None = None
    tap: Text | None = None
    configuration_change: Text | None = None


def post_log(request: HttpRequest, person: Person, station: str) -> HttpResponse:
    """A new entry; without ``at`` it is about this moment."""
    known_only(request.GET)
    found = _station_named(person, station)
    require(person, Action.LOG, found)
    wish = body_of(request, NewEntry)
    tap = None
    if wish.tap is not None:
        tap = found.taps.select_related("station").filter(name=wish.tap.rpartition("/")[2]).first()
        if tap is None or wish.tap not in (tap.name, tap_path(tap)):
            raise wrong_field("tap", "The station has no such tap.", "GET /api/v1/stations lists its taps.")
    entry = write_entry(found, by=person, at=_time("at", wish.at) or timezone.now(), until_at=_time("until", wish.until), tap=tap,
                        text=wish.text, tag=wish.tag, change=wish.configuration_change)
    return json_answer(entry_facts(_entry_named(person, entry.pk), person), status=201)


class EntryChange(Body):
    """The body of PATCH: what is left out stays as it is; ``until`` "" makes it a moment."""

    text: LongText | None = None
    tag: Text | None = None
    at: Text | None = None
    until: Text | None = None


def patch_entry(request: HttpRequest, person: Person, entry_id: int) -> HttpResponse:
    """Edit an entry; how it read before stays in ``earlier``."""
    known_only(request.GET)
    entry = _entry_named(person, entry_id)
    require(person, Action.LOG, entry.station)
    wish = body_of(request, EntryChange)
    edit_entry(
        entry, by=person, at=_time("at", wish.at) or entry.at, text=entry.text if wish.text is None else wish.text,
        until_at=entry.until_at if wish.until is None else _time("until", wish.until), tag=wish.tag or entry.tag,
    )
    return json_answer(entry_facts(_entry_named(person, entry_id), person))


class Answer(Body):
    """The body of POST …/change; null: nothing changed."""

    configuration_change: Text | None


def post_change(request: HttpRequest, person: Person, entry_id: int) -> HttpResponse:
    """Say whether what the entry tells of was a configuration change, and of which kind."""
    known_only(request.GET)
    entry = _entry_named(person, entry_id)
    require(person, Action.LOG, entry.station)
    say_change(entry, body_of(request, Answer).configuration_change, by=person)
    return json_answer(entry_facts(_entry_named(person, entry_id), person))


def post_strike(request: HttpRequest, person: Person, entry_id: int) -> HttpResponse:
    """Strike an entry out; a second time changes nothing."""
    known_only(request.GET)
    strike_entry(_entry_named(person, entry_id), by=person)
    return json_answer(entry_facts(_entry_named(person, entry_id), person))


def _station_named(person: Person, name: str) -> Station:
    found = stations_visible_to(person).filter(name=name).first()
    if found is None:
        raise not_found("There is no such station for you.", "GET /api/v1/stations lists those that you may see.")
    return found


def _entry_named(person: Person, entry_id: int) -> LogEntry:
    entry = loaded(entries_visible_to(person)).select_related("tap__station").filter(pk=entry_id).first()
    if entry is None:
        raise not_found("There is no such entry for you.", "GET /api/v1/stations/{station}/log lists those that you may see.")
    return entry


def _time(field: str, text: str | None) -> datetime | None:
    if not text:
        return None
    try:
        return parse_time(text)
    except ValueError as error:
        raise wrong_field(field, f"{field} cannot be used.", f"{str(error)[:1].upper()}{str(error)[1:]}.") from None
