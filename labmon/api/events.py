"""Events: alarms that start together, read and taken as one."""

from typing import Any

from django.http import HttpRequest, HttpResponse

from labmon.alarms.queries import alarm_rows_of
from labmon.api.answer import json_answer
from labmon.api.body import Body, Text, body_of
from labmon.api.named import station_named
from labmon.api.problem import not_found
from labmon.api.query import known_only, whole_number
from labmon.api.times import rfc3339
from labmon.benches.actions import set_shared, shared_facts
from labmon.events.actions import take_event
from labmon.events.models import Event
from labmon.events.queries import event_page, event_rows, events_visible_to
from labmon.events.words import EventFacts, event_sentence
from labmon.people.models import Person
from labmon.people.rights import Action, alarms_visible_to, require

LARGEST_ID = 2**63 - 1


def get_events(request: HttpRequest, person: Person) -> HttpResponse:
    """Events, newest first, as many as asked for; ``before`` leads on."""
    known_only(request.GET, "before", "count")
    before = whole_number(request.GET, "before", default=0, least=0, most=LARGEST_ID)
    count = whole_number(request.GET, "count", default=50, most=200)
    rows = event_rows(person, count=count, before_id=before or None)
    facts = [event_facts(event, said) for event, said in rows]
    return json_answer({"events": facts, "before": rows[-1][0].pk if len(rows) == count else None})


def event_facts(event: Event, said: EventFacts | None) -> dict[str, Any]:
    """An event as the document names it; ``said`` is None where all its alarms were withdrawn."""
    shared = said.shared if said else None
    return {
        "id": event.pk,
        "kind": event.kind,
        "level": event.level,
        "sentence": event_sentence(said) if said else "",
        "began_at": rfc3339(event.began_at),
        "shared": None if shared is None else {"kind": shared[0], "name": shared[1]},
        "benches": list(said.benches) if said else [],
        "alarms": [one.id for one in said.alarms] if said else [],
        "taken_at": rfc3339(event.taken_at),
        "taken_by": event.taken_by.username if event.taken_by else None,
        "is_drill": event.is_drill,
    }


def _event_named(person: Person, event_id: int) -> Event:
    event = events_visible_to(person).select_related("taken_by").filter(pk=event_id).first()
    if event is None:
        raise not_found("There is no such event for you.", "GET /api/v1/events lists those that you may see.")
    return event


def get_event(request: HttpRequest, person: Person, event_id: int) -> HttpResponse:
    """One event; of its benches and alarms those that the caller may see."""
    known_only(request.GET)
    return json_answer(_visible_facts(_event_named(person, event_id), person))


def _visible_facts(event: Event, person: Person) -> dict[str, Any]:
    facts = event_facts(event, event_page(event, person).facts)
    rows = alarm_rows_of(alarms_visible_to(person).filter(event=event))
    seen = {row.id for row in rows}
    if hidden := [one for one in facts["alarms"] if one not in seen]:
        facts |= {"alarms": [one for one in facts["alarms"] if one in seen], "benches": sorted({row.station for row in rows})}
        facts |= {"sentence": rows[0].message if len(hidden) else facts["sentence"], "shared": None}
    return facts


class EventAcknowledgement(Body):
    """The body of POST …/acknowledge, which may be empty."""

    note: Text = ""


def post_take(request: HttpRequest, person: Person, event_id: int) -> HttpResponse:
    """Acknowledge all of an event's alarms; a second time changes nothing."""
    known_only(request.GET)
    event = _event_named(person, event_id)
    require(person, Action.ACKNOWLEDGE)
    wish = body_of(request, EventAcknowledgement) if request.body else EventAcknowledgement()
    take_event(event.pk, by=person, note=wish.note)
    return json_answer(_visible_facts(_event_named(person, event_id), person))


class StationChange(Body):
    """The body of PATCH …/stations/{station}: what is given is changed."""

    room: Text | None = None
    laser: Text | None = None
    logger: Text | None = None
    network: Text | None = None
    reason: Text = ""


def patch_station(request: HttpRequest, person: Person, station: str) -> HttpResponse:
    """Say what a bench shares with others."""
    known_only(request.GET)
    found = station_named(person, station)
    require(person, Action.SET_SHARED, found)
    wish = body_of(request, StationChange)
    given = {one: getattr(wish, one) for one in ("room", "laser", "logger", "network") if getattr(wish, one) is not None}
    bench = set_shared(found, **(shared_facts(found, getattr(found, "bench", None)) | given), by=person, reason=wish.reason)
    return json_answer({"name": found.name} | {key: name or None for key, name in shared_facts(bench.station, bench).items()})
