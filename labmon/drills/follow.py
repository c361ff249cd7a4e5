"""Follows a drill from the door to the person: each step's time, and which step failed.

Steps happen in the real parts of labmon; here they are only looked for, and the false readings sent.
"""

import logging
from datetime import datetime, timedelta
from typing import Final

from django.db import transaction
from django.db.models import Min
from django.utils import timezone

from analysis.models import TapNow
from ingest.models import Tap
from labmon.alarms.models import Alarm
from labmon.alarms.states import state_of
from labmon.drills.bench import all_good, drill_tap, false_drop, send_readings
from labmon.drills.models import Drill
from labmon.live.publish import publish
from labmon.tell.faults import SendFault
from labmon.tell.models import Delivery, Message

#: Step, field of its time, and how long after the drill's beginning it has failed.
STEPS: Final = (
    ("door", "answered_at", timedelta(minutes=1)),
    ("reduce", "reduced_at", timedelta(minutes=2)),
    ("judge", "raised_at", timedelta(minutes=2)),
    ("outbox", "written_at", timedelta(minutes=2)),
    ("channel", "handed_at", timedelta(minutes=5)),
    ("person", "taken_at", timedelta(minutes=30)),
)
#: So long the false drop stands at least: the good readings behind it have their own seconds.
LIGHT_LASTS: Final = timedelta(seconds=10)
log = logging.getLogger(__name__)


def follow_drills(now: datetime | None = None) -> list[int]:
    """Send, look, and end what is over; returns ids of drills that ended. Safe to run twice and side by side."""
    ended = []
    for drill_id in Drill.objects.filter(ended_at=None).order_by("pk").values_list("pk", flat=True):
        if _claim_sending(drill_id):
            _send(drill_id)
        if _look(drill_id, now or timezone.now()):
            ended.append(drill_id)
            _end_light(drill_id, now or timezone.now())
    return ended


@transaction.atomic
def _claim_sending(drill_id: int) -> bool:
    """True for the one who is to send; noted before it is sent, so that a crash cannot send twice."""
    return bool(Drill.objects.filter(pk=drill_id, sent_at=None, ended_at=None).update(sent_at=timezone.now()))


def _send(drill_id: int) -> None:
    drill = Drill.objects.select_related("person").get(pk=drill_id)
    try:
        send_readings(drill_tap(drill.person), f"drill-{drill_id}", false_drop(), timezone.now())
    except SendFault as fault:
        Drill.objects.filter(pk=drill_id).update(fault=str(fault)[:300])
        log.warning("drill_not_sent", extra={"drill_id": drill_id, "fault": str(fault)})
    else:
        Drill.objects.filter(pk=drill_id).update(answered_at=timezone.now())


@transaction.atomic
def _look(drill_id: int, now: datetime) -> bool:
    """Note what has happened; True where the drill is over by that."""
    drill = Drill.objects.select_for_update(of=("self",)).select_related("person").filter(pk=drill_id, ended_at=None).first()
    if drill is None or drill.person is None:
        return False
    _note_steps(drill, now)
    missing = next(((step, patience) for step, field, patience in STEPS if getattr(drill, field) is None), None)
    if missing is None:
        if now - drill.answered_at < LIGHT_LASTS:
            drill.save()  # the good readings that end it must come after the false ones
            return False
        drill.ended_at = now
    elif now - drill.begun_at > missing[1]:
        drill.ended_at, drill.failed_step = now, missing[0]
        drill.fault = drill.fault or _why(drill, missing[0])
    drill.save()
    if drill.ended_at is not None:
        log.info("drill_over", extra={"drill_id": drill.pk, "failed_step": drill.failed_step})
        publish({"kind": "drill", "ids": [drill.pk]})
    return drill.ended_at is not None


def _note_steps(drill: Drill, now: datetime) -> None:
    tap = Tap.objects.filter(station__bench__is_drill=True, name=f"person-{drill.person_id}").first()
    if tap is None or drill.sent_at is None:
        return
    if drill.alarm is None:
        drill.alarm = Alarm.objects.filter(tap=tap, noticed_at__gte=drill.sent_at, kind="limit").order_by("pk").first()
    sent_us = int(drill.sent_at.timestamp() * 1e6) - 2_000_000
    if drill.reduced_at is None and TapNow.objects.filter(tap=tap, at_us__gte=sent_us).exists():
        drill.reduced_at = min(now, drill.alarm.noticed_at) if drill.alarm else now
    if drill.alarm is None:
        return
    drill.raised_at = drill.raised_at or drill.alarm.noticed_at
    messages = Message.objects.filter(event=drill.alarm.event_id, person=drill.person) if drill.alarm.event_id else None
    if messages is not None:
        drill.written_at = drill.written_at or messages.aggregate(at=Min("made_at"))["at"]
        handed = Delivery.objects.filter(message__in=messages, sent_at__isnull=False)
        drill.handed_at = drill.handed_at or handed.aggregate(at=Min("sent_at"))["at"]
    drill.taken_at = drill.taken_at or drill.alarm.acknowledged_at


def _why(drill: Drill, step: str) -> str:
    """What is known of why a step failed."""
    if step == "channel" and drill.alarm and drill.alarm.event_id:
        waiting = Delivery.objects.filter(message__event=drill.alarm.event_id, sent_at=None).exclude(last_error="").first()
        return waiting.last_error[:300] if waiting else "nothing was tried; is the worker running?"
    return {
        "door": "the door did not answer",
        "reduce": "no sample was reduced; is the worker running?",
        "judge": "no alarm was raised",
        "outbox": "no message was written",
        "person": f"{drill.person_name} did not take it",
    }.get(step, "")


def _end_light(drill_id: int, now: datetime) -> None:
    """Good readings end the false drop, and its alarm waits for nobody any more."""
    drill = Drill.objects.select_related("person").get(pk=drill_id)
    if drill.alarm_id is not None:
        _close_alarm(drill.alarm_id)
    if drill.answered_at is not None and drill.person is not None:
        try:
            boot, first = f"drill-{drill_id}", len(false_drop())
            send_readings(drill_tap(drill.person), boot, all_good(), now, first_sequence=first)
        except SendFault as fault:
            log.warning("drill_light_not_ended", extra={"drill_id": drill_id, "fault": str(fault)})


@transaction.atomic
def _close_alarm(alarm_id: int) -> None:
    alarm = Alarm.objects.select_for_update(of=("self",)).filter(pk=alarm_id, acknowledged_at=None).first()
    if alarm is not None:
        alarm.acknowledged_at, alarm.note = timezone.now(), "the drill is over; nobody took it"
        alarm.state, alarm.changed = state_of(alarm), alarm.changed + 1
        alarm.save(update_fields=["acknowledged_at", "note", "state", "changed"])
        publish({"kind": "alarm", "ids": [alarm.pk]})
