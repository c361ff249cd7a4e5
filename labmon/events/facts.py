"""What is told of events, read from the database: a fixed number of queries, however many alarms."""

from collections.abc import Mapping, Sequence
from typing import Any

from django.conf import settings

from analysis.models import TapNow
from labmon.alarms.models import Alarm, AlarmKind
from labmon.benches.show import NowSample, now_sample
from labmon.events.benches import members_of
from labmon.events.models import Event
from labmon.events.shared import Thing, shared_thing
from labmon.events.words import AlarmFacts, EventFacts, event_sentence


def alarms_of(events: Sequence[Event]) -> dict[int, list[Alarm]]:
    """Alarms of events that were not withdrawn, oldest first, with all that telling needs."""
    rows = Alarm.objects.filter(event__in=[event.pk for event in events], is_withdrawn=False)
    found: dict[int, list[Alarm]] = {event.pk: [] for event in events}
    for alarm in rows.select_related("tap__station", "experiment__owner", "event").order_by("raised_at", "pk"):
        found[alarm.event_id].append(alarm)
    return found


def facts_of(events: Sequence[Event], alarms: Mapping[int, Sequence[Alarm]]) -> dict[int, EventFacts]:
    """Each event (with at least one alarm) in facts, by id; three queries."""
    members = members_of({tuple(one) for event in events for one in event.things})
    given = [alarm for event in events for alarm in alarms[event.pk]]
    rows = TapNow.objects.filter(tap__in={alarm.tap_id for alarm in given}).values_list("tap", "at_us", "sample")
    samples = {tap: now_sample(at_us, sample, at_us) for tap, at_us, sample in rows}
    return {event.pk: _event_facts(event, alarms[event.pk], members, samples) for event in events if alarms[event.pk]}


def _event_facts(
    event: Event, alarms: Sequence[Alarm], members: Mapping[Thing, set[str]], samples: Mapping[int, NowSample]
) -> EventFacts:
    benches = sorted({alarm.tap.station.name for alarm in alarms})
    things: list[Thing] = [(kind, name) for kind, name in event.things]
    return EventFacts(
        id=event.pk,
        kind=event.kind,
        level=event.level,
        began_at=event.began_at,
        benches=benches,
        things=things,
        shared=shared_thing(things, set(benches), members),
        is_drill=event.is_drill,
        url=settings.PUBLIC_URL,
        alarms=[alarm_facts(alarm, samples.get(alarm.tap_id)) for alarm in alarms],
    )


def alarm_facts(alarm: Alarm, sample: NowSample | None) -> AlarmFacts:
    """One alarm in facts."""
    is_limit = alarm.kind == AlarmKind.LIMIT
    value = getattr(sample, alarm.quantity, None) if sample and is_limit else None
    return AlarmFacts(
        id=alarm.pk,
        tap=f"{alarm.tap.station.name}/{alarm.tap.name}",
        station=alarm.tap.station.name,
        experiment=alarm.experiment.name if alarm.experiment else "",
        level=alarm.level,
        sentence=alarm.message,
        began_at=alarm.began_at or alarm.raised_at,
        raised_at=alarm.raised_at,
        returned_at=alarm.returned_at,
        cause=alarm.cause,
        quantity=alarm.quantity if is_limit else "",
        limit=alarm.limit_value,
        now_value=value,
        now_sigma_db=sample.er_sigma_db if sample else None,
        now_at=sample.taken_at if sample and value is not None else None,
    )


def facts_for_programs(event: EventFacts, reason: str) -> dict[str, Any]:
    """What a webhook posts: numbers and names, no people."""
    return {
        "reason": reason,
        "event": event.id,
        "kind": event.kind,
        "level": event.level,
        "is_drill": event.is_drill,
        "sentence": event_sentence(event),
        "began_at": event.began_at.isoformat(),
        "shared": None if event.shared is None else {"kind": event.shared[0], "name": event.shared[1]},
        "benches": list(event.benches),
        "alarms": [_program_alarm(one) for one in event.alarms],
        "url": f"{event.url}/events/{event.id}/",
    }


def _program_alarm(one: AlarmFacts) -> dict[str, Any]:
    return {
        "id": one.id,
        "tap": one.tap,
        "level": one.level,
        "quantity": one.quantity or None,
        "value": one.now_value,
        "limit": one.limit,
        "raised_at": one.raised_at.isoformat(),
        "returned_at": one.returned_at.isoformat() if one.returned_at else None,
        "message": one.sentence,
    }


