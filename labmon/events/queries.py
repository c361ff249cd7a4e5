"""Events, the rota and who is on call, as pages and the API need them."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

from django.db.models import Count, Exists, OuterRef, Q, QuerySet

from labmon.alarms.models import Alarm
from labmon.alarms.queries import AlarmRow, alarm_rows_of
from labmon.events.benches import members_of
from labmon.events.facts import alarms_of, facts_of
from labmon.events.models import Event, OnCall
from labmon.events.shared import Thing
from labmon.events.words import EventFacts
from labmon.people.models import Person
from labmon.people.rights import alarms_visible_to


@dataclass(frozen=True, slots=True)
class EventPage:
    """All of an event's page: its facts (None: all its alarms were withdrawn), and the alarms that the reader may see."""

    event: Event
    facts: EventFacts | None
    alarms: list[AlarmRow]
    members: dict[Thing, set[str]]


def events_visible_to(person: Person) -> QuerySet[Event]:
    """Events with at least one alarm that ``person`` may see."""
    return Event.objects.filter(Exists(alarms_visible_to(person).filter(event=OuterRef("pk"))))


def event_page(event: Event, person: Person) -> EventPage:
    """An event for who may see it; a fixed number of queries."""
    facts = facts_of([event], alarms_of([event])).get(event.pk)
    things = [(kind, name) for kind, name in event.things]
    return EventPage(event, facts, alarm_rows_of(alarms_visible_to(person).filter(event=event)), members_of(things))


def event_rows(person: Person, *, count: int = 50, before_id: int | None = None) -> list[tuple[Event, EventFacts]]:
    """Events, newest first, as far as ``person`` sees all of what they say."""
    hidden = Alarm.objects.filter(event=OuterRef("pk")).exclude(pk__in=alarms_visible_to(person).values("pk"))
    rows = events_visible_to(person).filter(~Exists(hidden)).select_related("taken_by")
    if before_id is not None:
        rows = rows.filter(pk__lt=before_id)
    events = list(rows.order_by("-pk")[:count])
    facts = facts_of(events, alarms_of(events)) if events else {}
    return [(event, facts[event.pk]) for event in events if event.pk in facts]


def event_sizes(event_ids: Sequence[int]) -> dict[int, int]:
    """How many alarms each event has; one query."""
    rows = Alarm.objects.filter(event__in=set(event_ids), is_withdrawn=False).values("event").annotate(count=Count("pk"))
    return {row["event"]: row["count"] for row in rows}


def on_call_between(from_at: datetime, until_at: datetime) -> list[OnCall]:
    """Times on call that overlap a span, by start; one query."""
    rows = OnCall.objects.filter(from_at__lt=until_at, until_at__gt=from_at)
    return list(rows.select_related("person").order_by("from_at"))


def on_call_last() -> OnCall | None:
    """The time on call that ends last."""
    return OnCall.objects.select_related("person").order_by("-until_at").first()


def people_to_call() -> list[Person]:
    """Whom one may put on call."""
    return list(Person.objects.filter(~Q(role="guest"), is_active=True).order_by("username"))
