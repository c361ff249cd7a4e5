"""What people do to events: take one (all its alarms), and keep the rota and the rules of calling."""

import logging
from datetime import datetime, timedelta
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from django.db import IntegrityError, transaction
from django.utils import timezone

from labmon.alarms.models import Alarm, AlarmState
from labmon.alarms.states import state_of
from labmon.audit.actions import note as audit_note
from labmon.claims import JUDGING, lock_name, lock_taps
from labmon.errors import WriteError
from labmon.events.facts import alarms_of, facts_of
from labmon.events.models import CallRules, Event, OnCall
from labmon.events.telling import call_rules, hook_tellings
from labmon.events.words import taken_body, taken_subject
from labmon.live.publish import publish
from labmon.people.models import Person
from labmon.people.rights import has_access
from labmon.tell.models import Message, MessageKind, QuietHours
from labmon.tell.outbox import Telling, queue

LONGEST_ON_CALL = timedelta(days=31)
log = logging.getLogger(__name__)


@transaction.atomic
def take_event(event_id: int, *, by: Person, note: str = "") -> list[int]:
    """Acknowledge all of an event's alarms that nobody has acknowledged; the others who were told hear of it.

    Returns:
        Ids of the alarms taken; none where there was nothing left to take.
    Raises:
        Event.DoesNotExist: There is no such event.
    """
    said = note.replace("\0", "").strip()[:500]  # the database takes no NUL
    Event.objects.get(pk=event_id)
    lock_name("silence")
    lock_taps(JUDGING, Alarm.objects.filter(event=event_id).values_list("tap_id", flat=True))
    rows = Alarm.objects.select_for_update(of=("self",)).select_related("tap__station").filter(event=event_id, is_withdrawn=False)
    now, taken = timezone.now(), []
    for alarm in rows.filter(acknowledged_at=None).order_by("pk"):
        before = alarm.state
        alarm.acknowledged_at, alarm.acknowledged_by, alarm.note = now, by, said
        alarm.state, alarm.changed = state_of(alarm), alarm.changed + 1
        audit_note(by, "acknowledge alarm", alarm, {"state": before}, {"state": alarm.state, "event": event_id}, said)
        taken.append(alarm)
    if taken:
        Alarm.objects.bulk_update(taken, ["acknowledged_at", "acknowledged_by", "note", "state", "changed"])
        log.info("event_taken", extra={"event_id": event_id, "person_id": by.pk, "alarms": len(taken)})
        publish({"kind": "alarm", "ids": [alarm.pk for alarm in taken]})
        note_taken(event_id, by=by, at=now, note=said)
    return [alarm.pk for alarm in taken]


def note_taken(event_id: int, *, by: Person, at: datetime, note: str) -> None:
    """Where nothing of an event waits for someone any more: it is taken, nobody else is told, and who was told hears of it."""
    waiting = (AlarmState.UNACKNOWLEDGED, AlarmState.RETURNED_UNACKNOWLEDGED)
    event = Event.objects.select_for_update().get(pk=event_id)
    if Alarm.objects.filter(event=event, state__in=waiting).exists():
        return
    event.taken_at, event.taken_by = at, by
    event.due_at = event.next_step_at = None
    event.save(update_fields=["taken_at", "taken_by", "due_at", "next_step_at"])
    facts = facts_of([event], alarms_of([event])).get(event_id)
    if facts is None:
        return
    kinds = (MessageKind.CALL, MessageKind.BACK, MessageKind.PASSED_ON)
    told = Message.objects.filter(event=event, kind__in=kinds).exclude(person=by).exclude(person=None)
    others = Person.objects.filter(pk__in=told.values("person"), is_active=True).order_by("pk")
    reason = f"taken-{at:%Y%m%dT%H%M%S%f}"
    tellings = [
        Telling(
            key=f"event-{event_id}-{reason}-to-{one.pk}",
            kind=MessageKind.TAKEN,
            person=one,
            event_id=event_id,
            level=event.level,
            path=f"/events/{event_id}/",
            subject=taken_subject(facts, by.username),
            body=taken_body(facts, by.username, at, note),
        )
        for one in others
    ]
    was_told = Message.objects.filter(event=event).exists()
    queue([*tellings, *(hook_tellings([facts], lambda _: reason) if was_told else [])])


@transaction.atomic
def put_on_call(person: Person, from_at: datetime, until_at: datetime, *, by: Person | None) -> OnCall:
    """Someone is on call for a time.

    Raises:
        WriteError: The time ends before it begins, is longer than `LONGEST_ON_CALL`, or overlaps with somebody else's.
    """
    if not has_access(person):
        raise WriteError("person", f"The account of {person.username} has ended.", "Choose somebody else.")
    if not timedelta(0) < until_at - from_at <= LONGEST_ON_CALL:
        do = f"End it after it begins, within {LONGEST_ON_CALL.days} days."
        raise WriteError("until_at", "That is no time to be on call for.", do)
    try:
        with transaction.atomic():
            row = OnCall.objects.create(person=person, from_at=from_at, until_at=until_at, made_by=by)
    except IntegrityError as fault:
        raise WriteError("from_at", _who_then(from_at, until_at), "Choose another time, or take that one out first.") from fault
    audit_note(by, "put on call", person, after={"from_at": from_at, "until_at": until_at})
    return row


def _who_then(from_at: datetime, until_at: datetime) -> str:
    rows = OnCall.objects.filter(from_at__lt=until_at, until_at__gt=from_at).select_related("person").order_by("from_at")
    other = rows.first()
    if other is None:
        return "Somebody was on call then a moment ago."
    return f"{other.person.username} is on call from {other.from_at:%Y-%m-%d %H:%M} to {other.until_at:%Y-%m-%d %H:%M} UTC."


@transaction.atomic
def take_off_call(on_call_id: int, *, by: Person | None, now: datetime | None = None) -> None:
    """End a time on call: now if it has begun, else it never was; a second time changes nothing."""
    row = OnCall.objects.select_for_update(of=("self",)).select_related("person").filter(pk=on_call_id).first()
    clock = now or timezone.now()
    if row is None or row.until_at <= clock:
        return
    before = {"from_at": row.from_at, "until_at": row.until_at}
    if row.from_at < clock:
        row.until_at = clock
        row.save(update_fields=["until_at"])
    else:
        row.delete()
    audit_note(by, "take off call", row.person, before, {"until_at": min(max(clock, row.from_at), row.until_at)})


@transaction.atomic
def set_quiet_hours(person: Person, span: tuple[int, int] | None, zone: str = "UTC", *, by: Person | None) -> QuietHours | None:
    """When someone is not to be called (minutes of their day, from and until); None: never quiet.

    Raises:
        WriteError: The two are equal or no minutes of a day, or the time zone is not known.
    """
    before = QuietHours.objects.filter(person=person).first()
    if span is None:
        QuietHours.objects.filter(person=person).delete()
        row = None
    else:
        if not (0 <= span[0] < 1440 and 0 <= span[1] < 1440) or span[0] == span[1]:
            raise WriteError("from", "These are no two times of a day.", "Write them as 22:00 and 07:00.")
        try:
            ZoneInfo(zone)
        except (ZoneInfoNotFoundError, ValueError, OSError) as fault:
            raise WriteError("zone", f"{zone!r} is no time zone.", "Write one such as Europe/Berlin, or UTC.") from fault
        values = {"from_minute": span[0], "until_minute": span[1], "zone": zone}
        row, _ = QuietHours.objects.update_or_create(person=person, defaults=values)
    audit_note(by, "set quiet hours", person, before and _quiet_facts(before), row and _quiet_facts(row))
    return row


def _quiet_facts(row: QuietHours) -> dict[str, object]:
    return {"from_minute": row.from_minute, "until_minute": row.until_minute, "zone": row.zone}


@transaction.atomic
def set_call_rules(*, remind_after_s: float, drill_weekday: int | None, drill_hour: int, by: Person | None) -> CallRules:
    """The lab's rules of calling.

    Raises:
        WriteError: A time is out of range.
    """
    if not 60.0 <= remind_after_s <= 86_400.0:
        raise WriteError("remind_after", f"{remind_after_s:g} s is no such time.", "Choose 1 min to 24 h.")
    if drill_weekday not in (None, *range(7)) or drill_hour not in range(24):
        raise WriteError("drill_hour", "That is no hour of a week.", "Choose a day, and an hour from 0 to 23.")
    before = call_rules()
    facts = ("remind_after_s", "drill_weekday", "drill_hour")
    values = {"remind_after_s": remind_after_s, "drill_weekday": drill_weekday, "drill_hour": drill_hour}
    rules, _ = CallRules.objects.update_or_create(pk=1, defaults=values)
    audit_note(by, "set rules of calling", "rules of calling", {one: getattr(before, one) for one in facts}, values)
    return rules
