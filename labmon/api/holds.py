"""Holds: what keeps alarms quiet, read, begun and ended."""

from typing import Any, Literal

from django.http import HttpRequest, HttpResponse

from labmon.alarms.holding import Held, end_hold, shelve, take_out_of_service
from labmon.alarms.models import AlarmHold, AlarmKind, HoldKind
from labmon.alarms.queries import hold_rows
from labmon.api.answer import json_answer
from labmon.api.body import Body, Text, body_of
from labmon.api.named import tap_named, tap_path
from labmon.api.problem import not_found, wrong_field
from labmon.api.query import known_only
from labmon.api.times import rfc3339
from labmon.experiments.models import Limit
from labmon.people.models import Person
from labmon.people.rights import Action, experiments_visible_to, require, taps_visible_to

ACTION_OF = {HoldKind.SHELVED: Action.SHELVE, HoldKind.OUT_OF_SERVICE: Action.TAKE_OUT}


def get_holds(request: HttpRequest, person: Person) -> HttpResponse:
    """What is quiet now, those that end first in front."""
    known_only(request.GET)
    return json_answer({"holds": [hold_facts(hold) for hold in hold_rows(person)]})


def hold_facts(hold: AlarmHold) -> dict[str, Any]:
    """A hold as the document names it."""
    return {"id": hold.pk, "kind": hold.kind, "tap": tap_path(hold.tap), "alarms": hold.alarm_kind or "all",
            "limit": hold.limit_id, "by": hold.by.username if hold.by else None, "reason": hold.reason,
            "begun_at": rfc3339(hold.begun_at), "until": rfc3339(hold.until), "ended_at": rfc3339(hold.ended_at)}


class NewHold(Body):
    """The body of POST …/holds; ``limit`` where ``alarms`` is "limit"."""

    kind: Literal["shelved", "out-of-service"]
    reason: Text
    alarms: Literal["all", "limit", "no-reading", "untrusted"] = "all"
    limit: int | None = None
    for_s: float | None = None


def post_hold(request: HttpRequest, person: Person, station: str, tap: str) -> HttpResponse:
    """Shelve alarms of a tap, or take them out of service."""
    known_only(request.GET)
    found = tap_named(person, station, tap)
    wish = body_of(request, NewHold)
    require(person, ACTION_OF[HoldKind(wish.kind)], found)
    limit = None
    if (wish.alarms == AlarmKind.LIMIT) != (wish.limit is not None):
        raise wrong_field("limit", "It does not go with alarms.", 'Give limit with "alarms": "limit", and only then.')
    if wish.limit is not None:
        own = Limit.objects.filter(tap=found, experiment__in=experiments_visible_to(person))
        limit = own.filter(pk=wish.limit).first() if 0 < wish.limit < 2**63 else None
        if limit is None:
            raise wrong_field("limit", "The tap has no such limit.", "GET /api/v1/experiments/{id}/limits has the ids.")
    held = Held(found, "" if wish.alarms == "all" else wish.alarms, limit)
    if wish.kind == HoldKind.OUT_OF_SERVICE:
        made = take_out_of_service(held, by=person, reason=wish.reason, for_s=wish.for_s)
    elif wish.for_s is None:
        raise wrong_field("for_s", "A shelving needs its time.", "Give seconds, at most 14400.")
    else:
        made = shelve(held, by=person, for_s=wish.for_s, reason=wish.reason)
    return json_answer(hold_facts(made), status=201)


def post_end_hold(request: HttpRequest, person: Person, hold_id: int) -> HttpResponse:
    """End a hold before its time; a second time changes nothing."""
    known_only(request.GET)
    rows = AlarmHold.objects.filter(tap__in=taps_visible_to(person)).select_related("tap__station", "by")
    hold = rows.filter(pk=hold_id).first()
    if hold is None:
        raise not_found("There is no such hold for you.", "GET /api/v1/holds lists those that you may see.")
    require(person, ACTION_OF[HoldKind(hold.kind)], hold.tap)
    end_hold(hold.pk, by=person)
    return json_answer(hold_facts(rows.get(pk=hold_id)))
