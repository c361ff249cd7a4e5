"""Alarms, read and acknowledged."""

from typing import Any

from django.http import HttpRequest, HttpResponse

from labmon.alarms.actions import acknowledge_alarm
from labmon.alarms.holding import Held, shelve, unshelve_alarm
from labmon.alarms.models import Alarm
from labmon.alarms.queries import AlarmRow, alarm_row, alarm_rows
from labmon.api.answer import json_answer
from labmon.api.body import Body, Text, body_of
from labmon.api.problem import not_found
from labmon.api.query import known_only, one_of, whole_number
from labmon.api.schemas import ALARM_STATES
from labmon.api.times import rfc3339
from labmon.people.models import Person
from labmon.people.rights import Action, alarms_visible_to, require

LARGEST_ID = 2**63 - 1


def get_alarms(request: HttpRequest, person: Person) -> HttpResponse:
    """Alarms, newest first, as many as asked for; ``before`` leads on."""
    known_only(request.GET, "state", "experiment", "before", "count")
    state = one_of(request.GET, "state", ALARM_STATES, default="")
    experiment = whole_number(request.GET, "experiment", default=0, least=0, most=LARGEST_ID)
    before = whole_number(request.GET, "before", default=0, least=0, most=LARGEST_ID)
    count = whole_number(request.GET, "count", default=200, most=1000)
    rows = alarm_rows(person, state=state or None, experiment=experiment or None, before_id=before or None, limit=count)
    return json_answer({"alarms": [alarm_facts(row) for row in rows],
                        "before": rows[-1].id if len(rows) == count else None})


def alarm_facts(row: AlarmRow) -> dict[str, Any]:
    """An alarm as the contract names it."""
    times = ("raised_at", "alarm_at", "returned_at", "acknowledged_at")
    return ({"id": row.id, "kind": row.kind, "experiment": row.experiment_id, "tap": row.tap,
             "quantity": row.quantity or None, "level": row.level, "state": row.state,
             "acknowledged_by": row.acknowledged_by or None, "note": row.note, "value": row.value, "limit": row.limit,
             "cause": row.cause or None, "event": row.event_id, "is_drill": row.is_drill,
             "message": row.message, "is_late": row.is_late, "is_withdrawn": row.is_withdrawn,
             "shelved_until": rfc3339(row.shelved_until),
             "earlier_bounds": [{"raised_at": rfc3339(raised_at), "returned_at": rfc3339(returned_at)}
                                for raised_at, returned_at in row.earlier_bounds]}
            | {name: rfc3339(getattr(row, name)) for name in times})


class Acknowledgement(Body):
    """The body of POST …/acknowledge, which may be empty."""

    note: Text = ""


def post_acknowledge(request: HttpRequest, person: Person, alarm_id: int) -> HttpResponse:
    """Say that the alarm was seen; a second time changes nothing."""
    known_only(request.GET)
    alarm = _alarm_named(person, alarm_id)
    require(person, Action.ACKNOWLEDGE, alarm)
    wish = body_of(request, Acknowledgement) if request.body else Acknowledgement()
    acknowledge_alarm(alarm.pk, by=person, note=wish.note)
    return json_answer(alarm_facts(alarm_row(alarm.pk, person)))


def _alarm_named(person: Person, alarm_id: int) -> Alarm:
    alarm = alarms_visible_to(person).select_related("tap__station", "limit").filter(pk=alarm_id).first()
    if alarm is None:
        raise not_found("There is no such alarm for you.", "GET /api/v1/alarms lists those that you may see.")
    return alarm


class Shelving(Body):
    """The body of POST …/shelve."""

    for_s: float
    reason: Text


def post_shelve(request: HttpRequest, person: Person, alarm_id: int) -> HttpResponse:
    """Keep the alarm, and what its limit may raise meanwhile, quiet for a stated time; it comes back by itself."""
    known_only(request.GET)
    alarm = _alarm_named(person, alarm_id)
    require(person, Action.SHELVE, alarm)
    wish = body_of(request, Shelving)
    shelve(Held.of_alarm(alarm), by=person, for_s=wish.for_s, reason=wish.reason)
    return json_answer(alarm_facts(alarm_row(alarm.pk, person)))


def post_unshelve(request: HttpRequest, person: Person, alarm_id: int) -> HttpResponse:
    """End every shelving that keeps the alarm quiet; where there is none nothing changes."""
    known_only(request.GET)
    alarm = _alarm_named(person, alarm_id)
    require(person, Action.SHELVE, alarm)
    unshelve_alarm(alarm, by=person)
    return json_answer(alarm_facts(alarm_row(alarm.pk, person)))
