"""What happens while nobody takes an alarm: a reminder once, and the next of the chain is told; step by step to its end.

Warnings are told once and wait for the morning; drills wait for who is drilled.
"""

from collections import defaultdict
from collections.abc import Sequence
from datetime import datetime, timedelta

from django.db import transaction
from django.utils import timezone

from labmon.alarms.models import Alarm, AlarmLevel, AlarmState
from labmon.events.chain import Rung, Told, chains_of, next_of
from labmon.events.facts import alarms_of, facts_of
from labmon.events.models import CallRules, Event
from labmon.events.telling import by_person, call_rules, telling_to
from labmon.events.words import EventFacts, passed_on_lines, reminder_lines
from labmon.tell.models import Message, MessageKind
from labmon.tell.outbox import Telling, queue


@transaction.atomic
def take_steps(now: datetime | None = None) -> int:
    """Remind, and pass on, where it is time; returns how many messages were new. Safe to run twice and side by side."""
    clock = now or timezone.now()
    rows = Event.objects.select_for_update(skip_locked=True).filter(next_step_at__lte=clock).order_by("next_step_at", "pk")
    events = list(rows)
    if not events:
        return 0
    alarms, rules = alarms_of(events), call_rules()
    waiting = {event.pk: [alarm for alarm in alarms[event.pk] if _waits(alarm)] for event in events}
    chains = chains_of([alarm for rows in waiting.values() for alarm in rows], clock)
    facts, said = facts_of(events, alarms), _said(events)
    tellings: list[Telling] = []
    for event in events:
        more = (
            _step(event, facts[event.pk], waiting[event.pk], chains, said[event.pk], rules, clock) if waiting[event.pk] else []
        )
        tellings += more
        event.step += 1
        event.next_step_at = clock + timedelta(seconds=rules.remind_after_s) if more else None
    fresh = queue(tellings)
    Event.objects.bulk_update(events, ["step", "next_step_at"])
    return len(fresh)


def _waits(alarm: Alarm) -> bool:
    """What came back by itself, or is a warning, wakes nobody else."""
    return alarm.state == AlarmState.UNACKNOWLEDGED and alarm.level == AlarmLevel.ALARM


def _said(events: Sequence[Event]) -> dict[int, list[Message]]:
    found: dict[int, list[Message]] = defaultdict(list)
    kinds = (MessageKind.CALL, MessageKind.BACK, MessageKind.PASSED_ON)
    for message in Message.objects.filter(event__in=events, kind__in=kinds).select_related("person").order_by("made_at", "pk"):
        found[message.event_id].append(message)
    return found


def _step(
    event: Event,
    facts: EventFacts,
    waiting: Sequence[Alarm],
    chains: dict[int, list[Rung]],
    said: Sequence[Message],
    rules: CallRules,
    now: datetime,
) -> list[Telling]:
    told = {one.person_id for one in said if one.person_id}
    waited = now - (said[0].made_at if said else event.opened_at)
    names = [f"{one.person.username} ({one.duty}) at {one.made_at:%H:%M} UTC" for one in said if one.person]
    tellings = [
        telling_to(
            facts, mine, person, f"passed-on-{event.step + 1}", MessageKind.PASSED_ON, AlarmLevel.ALARM, rules,
            prefix="not taken: ", extra=passed_on_lines(waited, names),
        )
        for person, mine in by_person(waiting, {alarm.pk: next_of(chains[alarm.pk], told) for alarm in waiting})
    ]
    if event.step == 0:
        own = by_person(waiting, {alarm.pk: _told_awake(chains[alarm.pk], told) for alarm in waiting})
        tellings += [
            telling_to(
                facts, mine, person, "reminder", MessageKind.REMINDER, AlarmLevel.ALARM, rules,
                prefix="reminder: ", extra=reminder_lines(waited),
            )
            for person, mine in own
        ]
    return tellings


def _told_awake(chain: list[Rung], told: set[int]) -> list[Told]:
    people = [one for rung in chain for one in rung]
    return [one for one in people if one.person and one.person.pk in told and one.quiet_until is None]
