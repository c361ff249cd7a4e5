"""A looser limit during a run: asked for by one person, decided by another."""

from typing import Any, Literal

from django.http import HttpRequest, HttpResponse

from labmon.api.answer import json_answer
from labmon.api.body import Body, Text, body_of
from labmon.api.named import experiment_named, tap_in_body, tap_path
from labmon.api.problem import not_found
from labmon.api.query import known_only
from labmon.api.times import rfc3339
from labmon.experiments.consent import ask_to_loosen, decide_request, requests_of, withdraw_request
from labmon.experiments.models import LimitRequest
from labmon.experiments.rules import LimitWish
from labmon.people.models import Person
from labmon.people.rights import Action, experiments_visible_to, require

MOST = 200


def get_requests(request: HttpRequest, person: Person, experiment_id: int) -> HttpResponse:
    """Requests for looser limits, newest first."""
    known_only(request.GET)
    experiment = experiment_named(person, experiment_id)
    return json_answer({"experiment": experiment.pk,
                        "requests": [request_facts(one) for one in requests_of(experiment, most=MOST)]})


def request_facts(row: LimitRequest) -> dict[str, Any]:
    """A request as the document names it."""
    return {"id": row.pk, "experiment": row.experiment_id, "tap": tap_path(row.tap), "quantity": row.quantity,
            "wish": row.wish, "loosens": row.loosens, "asked_by": row.asked_by.username, "asked_at": rfc3339(row.asked_at),
            "reason": row.reason, "expires_at": rfc3339(row.expires_at), "state": row.state,
            "decided_by": row.decided_by.username if row.decided_by else None, "decided_at": rfc3339(row.decided_at),
            "note": row.note}


class LooserLimit(Body):
    """The body of POST …/limits/requests: the limit wished for, or ``retire``."""

    tap: Text
    quantity: Literal["er_db", "angle_deg", "dop", "power_w", "trusted_share", "time_to_limit_s"]
    reason: Text
    retire: bool = False
    alarm: float | None = None
    warning: float | None = None
    on_delay_s: float = 60.0
    off_delay_s: float = 60.0
    deadband: float | None = None
    window_s: float | None = None
    in_runs_only: bool = False


def post_request(request: HttpRequest, person: Person, experiment_id: int) -> HttpResponse:
    """Ask a second person for a looser limit while a run is under way."""
    known_only(request.GET)
    experiment = experiment_named(person, experiment_id)
    require(person, Action.SET_LIMIT, experiment)
    asked = body_of(request, LooserLimit)
    tap = tap_in_body(person, asked.tap, field="tap")
    wish = None if asked.retire else LimitWish(
        alarm=float("nan") if asked.alarm is None else asked.alarm, warning=asked.warning, on_delay_s=asked.on_delay_s,
        off_delay_s=asked.off_delay_s, deadband=asked.deadband, window_s=asked.window_s, in_runs_only=asked.in_runs_only)
    made = ask_to_loosen(experiment, tap, asked.quantity, wish, by=person, reason=asked.reason)
    return json_answer(request_facts(made), status=201)


class Decision(Body):
    """The body of a decision."""

    note: Text = ""


def post_grant(request: HttpRequest, person: Person, request_id: int) -> HttpResponse:
    """Consent: the limit is in force at once."""
    return _decided(request, person, request_id, is_granted=True)


def post_refuse(request: HttpRequest, person: Person, request_id: int) -> HttpResponse:
    """Refuse: the limit stays."""
    return _decided(request, person, request_id, is_granted=False)


def _decided(request: HttpRequest, person: Person, request_id: int, *, is_granted: bool) -> HttpResponse:
    known_only(request.GET)
    row = _named(person, request_id)
    require(person, Action.SET_LIMIT, row.experiment)
    note = body_of(request, Decision).note if request.body else ""
    return json_answer(request_facts(decide_request(row.pk, by=person, is_granted=is_granted, note=note)))


def post_withdraw(request: HttpRequest, person: Person, request_id: int) -> HttpResponse:
    """Take back what one has asked for."""
    known_only(request.GET)
    return json_answer(request_facts(withdraw_request(_named(person, request_id).pk, by=person)))


def _named(person: Person, request_id: int) -> LimitRequest:
    row = (LimitRequest.objects.filter(experiment__in=experiments_visible_to(person), pk=request_id)
           .select_related("experiment").first())
    if row is None:
        raise not_found("There is no such request for you.", "GET /api/v1/experiments/{id}/limits/requests lists them.")
    return row
