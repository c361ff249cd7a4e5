"""Writes the messages of events: calls that are due, what a quiet time or a run's start says anew, and "taken by".

Each person is told once of an event, of their own benches; again only where it rises to an alarm. Everything is written
in one transaction with the event's row locked, under keys that are unique, so that doing it twice tells once.
"""

from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from datetime import datetime, timedelta

from django.db import transaction
from django.utils import timezone

from labmon.alarms.models import Alarm, AlarmLevel, AlarmState
from labmon.events.chain import Rung, Told, chains_of, first_of
from labmon.events.facts import alarms_of, facts_for_programs, facts_of
from labmon.events.models import CallRules, Event
from labmon.events.words import AlarmFacts, EventFacts, body_of, subject_of
from labmon.tell.models import Message, MessageKind, Webhook
from labmon.tell.outbox import Telling, queue

_TELLS = (MessageKind.CALL, MessageKind.BACK, MessageKind.REMINDER, MessageKind.PASSED_ON)


def call_rules() -> CallRules:
    """The lab's rules of calling; the proposed ones where nobody set any."""
    return CallRules.objects.filter(pk=1).first() or CallRules(pk=1)


@transaction.atomic
def tell_due(now: datetime | None = None, ids: Iterable[int] | None = None) -> int:
    """Write the calls of events that are due (of those named, or of all); returns how many messages were new."""
    clock = now or timezone.now()
    rows = Event.objects.select_for_update(skip_locked=True).filter(due_at__lte=clock)
    events = list((rows if ids is None else rows.filter(pk__in=list(ids))).order_by("due_at", "pk"))
    if not events:
        return 0
    alarms = alarms_of(events)
    wanted = {event.pk: [alarm for alarm in alarms[event.pk] if _calls(alarm)] for event in events}
    facts, told = facts_of(events, alarms), told_levels(events)
    chains, rules = chains_of([alarm for rows in wanted.values() for alarm in rows], clock), call_rules()
    tellings = [
        telling
        for event in events
        if event.pk in facts and wanted[event.pk]
        for telling in _calls_of(facts[event.pk], wanted[event.pk], chains, told[event.pk], rules)
    ]
    tellings += _for_hooks([facts[event.pk] for event in events if event.pk in facts and wanted[event.pk]])
    fresh = queue(tellings)
    for event in events:
        event.due_at = None
        if wanted[event.pk] and event.next_step_at is None and event.level == AlarmLevel.ALARM and not event.is_drill:
            event.next_step_at = clock + timedelta(seconds=rules.remind_after_s)
    Event.objects.bulk_update(events, ["due_at", "next_step_at"])
    return len(fresh)


def _calls(alarm: Alarm) -> bool:
    """True while somebody is needed: not taken, not kept quiet, not only noted."""
    return alarm.state in (AlarmState.UNACKNOWLEDGED, AlarmState.RETURNED_UNACKNOWLEDGED)


def told_levels(events: Sequence[Event]) -> dict[int, dict[int, set[str]]]:
    """Per event and person at which levels they were told."""
    found: dict[int, dict[int, set[str]]] = {event.pk: defaultdict(set) for event in events}
    rows = Message.objects.filter(event__in=list(found), kind__in=_TELLS).values_list("event", "person", "level")
    for event_id, person_id, level in rows:
        found[event_id][person_id or 0].add(level)
    return found


def _calls_of(
    event: EventFacts,
    alarms: Sequence[Alarm],
    chains: Mapping[int, list[Rung]],
    told: Mapping[int, set[str]],
    rules: CallRules,
) -> Iterable[Telling]:
    for person, mine in by_person(alarms, {alarm.pk: first_of(chains[alarm.pk]) for alarm in alarms}):
        level = AlarmLevel.ALARM if any(alarm.level == AlarmLevel.ALARM for alarm in mine) else AlarmLevel.WARNING
        before = told.get(person.person.pk if person.person else 0, set())
        if level in before or AlarmLevel.ALARM in before:
            continue
        yield telling_to(event, mine, person, f"{level}", MessageKind.CALL, level, rules)


def by_person(alarms: Sequence[Alarm], rungs: Mapping[int, Rung]) -> list[tuple[Told, list[Alarm]]]:
    """Whom to tell, and of which alarms; as the first duty under which they come."""
    found: dict[int, tuple[Told, list[Alarm]]] = {}
    for alarm in alarms:
        for told in rungs[alarm.pk]:
            found.setdefault(told.person.pk if told.person else 0, (told, []))[1].append(alarm)
    return list(found.values())


def telling_to(
    event: EventFacts,
    alarms: Sequence[Alarm],
    told: Told,
    reason: str,
    kind: str,
    level: str,
    rules: CallRules,
    *,
    prefix: str = "",
    extra: Sequence[str] = (),
) -> Telling:
    """A message about an event to one person; ``reason`` with event and person is its key."""
    ids = {alarm.pk for alarm in alarms}
    own: list[AlarmFacts] = [one for one in event.alarms if one.id in ids]
    return Telling(
        key=f"event-{event.id}-{reason}-to-{told.person.pk if told.person else 'lab'}",
        kind=kind,
        person=told.person,
        event_id=event.id,
        level=level,
        duty=told.duty,
        path=f"/events/{event.id}/",
        subject=subject_of(event, own, prefix),
        body=body_of(event, own, told.duty, rules.remind_after_s, extra),
        not_before=told.quiet_until,
    )


def tell_anew(events: Sequence[Event], called: Sequence[tuple[Alarm, str]], now: datetime) -> None:
    """Call again for alarms that were quiet: one message a person and reason (the hold that ended, the run that began)."""
    alarms = alarms_of(events)
    facts, rules = facts_of(events, alarms), call_rules()
    loaded = {alarm.pk: alarm for rows in alarms.values() for alarm in rows}
    chains = chains_of([loaded[alarm.pk] for alarm, _ in called], now)
    by_reason: dict[tuple[int, str], list[Alarm]] = defaultdict(list)
    for alarm, reason in called:
        by_reason[loaded[alarm.pk].event_id, reason].append(loaded[alarm.pk])
    tellings = [
        telling_to(facts[event_id], mine, told, reason, MessageKind.BACK, _level_of(mine), rules)
        for (event_id, reason), rows in by_reason.items()
        for told, mine in by_person(rows, {alarm.pk: first_of(chains[alarm.pk]) for alarm in rows})
    ]
    queue([*tellings, *_for_hooks([facts[event.pk] for event in events])])
    for event in events:
        event.due_at = None
        if event.level == AlarmLevel.ALARM and not event.is_drill:
            event.next_step_at = now + timedelta(seconds=rules.remind_after_s)
            event.taken_at = event.taken_by = None
    Event.objects.bulk_update(events, ["due_at", "next_step_at", "taken_at", "taken_by"])


def _level_of(alarms: Sequence[Alarm]) -> str:
    return AlarmLevel.ALARM if any(alarm.level == AlarmLevel.ALARM for alarm in alarms) else AlarmLevel.WARNING


def _for_hooks(events: Sequence[EventFacts]) -> list[Telling]:
    return hook_tellings(events, lambda event: event.level)


def hook_tellings(events: Sequence[EventFacts], reason_of) -> list[Telling]:
    """A message to each webhook for each event and reason."""
    hooks = list(Webhook.objects.filter(ended_at=None).order_by("pk")) if events else []
    return [
        Telling(
            key=f"event-{event.id}-{reason_of(event)}-hook-{hook.pk}",
            webhook=hook,
            event_id=event.id,
            level=event.level,
            subject=subject_of(event, event.alarms),
            body="",
            facts=facts_for_programs(event, reason_of(event)),
        )
        for event in events
        for hook in hooks
    ]
