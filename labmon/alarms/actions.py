"""What people do to alarms: each write with its audit row and its message to the browsers."""

import logging

from django.db import transaction
from django.utils import timezone

from labmon.alarms.models import Alarm
from labmon.alarms.states import state_of
from labmon.audit.actions import note as audit_note
from labmon.events.actions import note_taken
from labmon.live.publish import publish
from labmon.people.models import Person

log = logging.getLogger(__name__)


@transaction.atomic
def acknowledge_alarm(alarm_id: int, *, by: Person, note: str = "") -> Alarm:
    """Mark an alarm as seen by ``by``; a second acknowledgement changes nothing.

    Raises:
        Alarm.DoesNotExist: There is no such alarm.
    """
    alarm = Alarm.objects.select_for_update(of=("self",)).select_related("tap__station").get(pk=alarm_id)
    if alarm.acknowledged_at is None:
        before, note = alarm.state, note.replace("\0", "")[:500]  # the database takes no NUL
        alarm.acknowledged_at, alarm.acknowledged_by, alarm.note = timezone.now(), by, note
        alarm.state, alarm.changed = state_of(alarm), alarm.changed + 1
        alarm.save(update_fields=["acknowledged_at", "acknowledged_by", "note", "state", "changed"])
        audit_note(by, "acknowledge alarm", alarm, {"state": before}, {"state": alarm.state}, note)
        log.info("alarm_acknowledged", extra={"alarm_id": alarm.pk, "person_id": by.pk})
        publish({"kind": "alarm", "ids": [alarm.pk]})
        if alarm.event_id is not None:
            note_taken(alarm.event_id, by=by, at=alarm.acknowledged_at, note=note)
    return alarm
