"""Which event an alarm that calls belongs to: an open one that began with it and shares something, else one of its own.

All of it under one lock of the database, taken when somebody is to be called and held until the alarms are committed: two
workers that find two alarms of one outage at once make one event of them.
"""

from collections.abc import Sequence
from datetime import datetime, timedelta
from typing import Final

from labmon.alarms.models import Alarm, AlarmKind, AlarmLevel
from labmon.events.benches import members_of, things_by_tap
from labmon.events.models import Event, EventKind
from labmon.events.shared import TOGETHER_WITHIN, BenchThings, Span, ThingKind, common, is_together

#: A call waits so long for others of the same event, where other benches share something with its bench.
GATHER: Final = timedelta(seconds=10)


def join_events(alarms: Sequence[Alarm], now: datetime) -> list[Event]:
    """Give each alarm its event, open it for calls, and return the events; a fixed number of queries but for writes.

    Args:
        alarms: Rows that exist; one that has an event already stays in it.
    """
    things = things_by_tap(alarm.tap_id for alarm in alarms)
    near = _events_near(alarms)
    known = {event.pk: event for event in near}
    joined: list[tuple[Alarm, Event]] = []
    for alarm in sorted(alarms, key=lambda one: (_span(one)[0], one.pk)):
        bench = things[alarm.tap_id]
        event = known[alarm.event_id] if alarm.event_id else _matching(alarm, bench, near)
        if event is None:
            event = Event(**_beginning(alarm, bench))
            near.append(event)
        elif alarm.event_id is None:
            event.things = [list(one) for one in common(event.things, bench.things(event.kind))]
        if alarm.level == AlarmLevel.ALARM:
            event.level = AlarmLevel.ALARM
        joined.append((alarm, event))
    events = list({id(event): event for _, event in joined}.values())
    _set_due(events, now)
    Event.objects.bulk_update([event for event in events if event.pk], ["things", "level", "due_at"])
    Event.objects.bulk_create([event for event in events if not event.pk])
    for alarm, event in joined:
        alarm.event = event
    Alarm.objects.bulk_update(alarms, ["event"])
    return events


def kind_of(alarm: Alarm) -> EventKind:
    """The kind of event that an alarm makes."""
    return EventKind.SILENCE if alarm.kind == AlarmKind.NO_READING else EventKind.LIGHT


def _span(alarm: Alarm) -> Span:
    began_at = alarm.began_at or alarm.raised_at
    return began_at, max(alarm.began_until or began_at, began_at)


def _events_near(alarms: Sequence[Alarm]) -> list[Event]:
    spans = [_span(alarm) for alarm in alarms]
    near = Event.objects.select_for_update().filter(
        began_at__lte=max(last for _, last in spans) + TOGETHER_WITHIN,
        began_until__gte=min(first for first, _ in spans) - TOGETHER_WITHIN,
        is_drill=False,
    )
    found = {event.pk: event for event in near.order_by("pk")}
    own = {alarm.event_id for alarm in alarms if alarm.event_id} - found.keys()
    return [*found.values(), *Event.objects.select_for_update().filter(pk__in=own).order_by("pk")]


def _matching(alarm: Alarm, bench: BenchThings, events: Sequence[Event]) -> Event | None:
    """The event of the same bench if there is one, else the oldest that shares something."""
    if bench.is_drill:
        return None
    kind, span = kind_of(alarm), _span(alarm)
    own = bench.things(kind)
    for only in (ThingKind.BENCH, None):
        for event in events:
            is_near = event.kind == kind and not event.is_drill and is_together((event.began_at, event.began_until), span)
            shared = common(event.things, own)
            if is_near and (shared if only is None else any(one == only for one, _ in shared)):
                return event
    return None


def _beginning(alarm: Alarm, bench: BenchThings) -> dict[str, object]:
    began_at, began_until = _span(alarm)
    kind = kind_of(alarm)
    things = [] if bench.is_drill else [list(one) for one in bench.things(kind)]
    return {"kind": kind, "things": things, "began_at": began_at, "began_until": began_until, "is_drill": bench.is_drill}


def _set_due(events: Sequence[Event], now: datetime) -> None:
    """Calls wait for others only where there are any."""
    members = members_of({tuple(one) for event in events for one in event.things})
    for event in events:
        if event.due_at is None:
            has_others = any(len(members.get(tuple(one), ())) > 1 for one in event.things)
            event.due_at = now + GATHER if has_others else now
