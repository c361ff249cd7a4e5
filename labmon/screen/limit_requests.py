"""A looser limit during a run: the banner that a request waits, and the buttons of the two people."""

from dataclasses import dataclass
from typing import Any

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import get_object_or_404, redirect
from django.views.decorators.http import require_POST

from labmon.errors import NotAllowed, WriteError
from labmon.experiments.actions import PART_WORDS
from labmon.experiments.consent import ask_to_loosen, decide_request, requests_of, withdraw_request
from labmon.experiments.models import Experiment, LimitRequest, LimitVersion, RequestState
from labmon.experiments.rules import LimitWish
from labmon.people.rights import Action, experiments_visible_to, require
from labmon.screen.door import for_people, say_refusal
from labmon.screen.level_words import NAMES, both_units, changes_text
from labmon.screen.named import visible_experiment
from labmon.screen.present import time_text


@dataclass(frozen=True, slots=True, kw_only=True)
class RequestView:
    """A request in words, and what the reader may do with it."""

    id: int
    title: str
    change: str
    looser: str
    asked_by: str
    reason: str
    until: str
    outcome: str
    may_decide: bool
    may_withdraw: bool


def requests_shown(request: HttpRequest, experiment: Experiment, *, may_set: bool) -> dict[str, Any]:
    """Requests that wait, and those decided of late."""
    rows = requests_of(experiment)
    views = [request_view(row, person_id=request.user.pk, may_set=may_set) for row in rows]
    waiting = [view for row, view in zip(rows, views, strict=True) if row.state == RequestState.WAITING]
    return {"asked": waiting, "decided": [view for view in views if view not in waiting]}


def request_view(row: LimitRequest, *, person_id: int, may_set: bool) -> RequestView:
    """A request in words."""
    is_own, waits = row.asked_by_id == person_id, row.state == RequestState.WAITING
    outcome = row.state if row.decided_by is None else f"{row.state} by {row.decided_by.username}"
    return RequestView(
        id=row.pk,
        title=f"{row.tap.station.name}/{row.tap.name}, {NAMES[row.quantity]} {both_units(row.quantity, row.version.alarm)}",
        change=_change(row),
        looser=", ".join(PART_WORDS[part] for part in row.loosens),
        asked_by=row.asked_by.username,
        reason=row.reason,
        until=time_text(row.expires_at),
        outcome="" if waits else f"{outcome} {time_text(row.decided_at)}" + (f": “{row.note}”" if row.note else ""),
        may_decide=waits and may_set and not is_own,
        may_withdraw=waits and is_own,
    )


def _change(row: LimitRequest) -> str:
    if row.wish is None:
        return "to be retired"
    wished = dict(row.wish)
    if wished.get("deadband") is None:
        wished["deadband"] = row.version.deadband
    return changes_text(row.quantity, row.version, LimitVersion(**wished))


@require_POST
@for_people
def ask_limit_page(request: HttpRequest, experiment_id: int) -> HttpResponse:
    """Ask a second person for the limit in the form."""
    from labmon.screen.experiments import limit_form, show_refused, taps_of

    found = visible_experiment(request.user, experiment_id)
    require(request.user, Action.SET_LIMIT, found)
    form = limit_form(found, request.POST)
    if form.is_valid():
        typed = dict(form.cleaned_data)
        tap, quantity, reason = taps_of(found)[typed.pop("tap")], typed.pop("quantity"), typed.pop("reason")
        try:
            ask_to_loosen(found, tap, quantity, LimitWish(**typed), by=request.user, reason=reason)
        except WriteError as error:
            return show_refused(request, found, form, error)
        messages.success(request, "Asked. The limit stays as it is until a second person consents.")
        return redirect("experiment", experiment_id=found.pk)
    return show_refused(request, found, form, None)


@require_POST
@for_people
def ask_retire_page(request: HttpRequest, experiment_id: int, limit_id: int) -> HttpResponse:
    """Ask a second person to let a limit go while a run is under way."""
    found = visible_experiment(request.user, experiment_id)
    require(request.user, Action.SET_LIMIT, found)
    limit = get_object_or_404(found.limits.select_related("tap__station"), pk=limit_id)
    try:
        ask_to_loosen(found, limit.tap, limit.quantity, None, by=request.user, reason=request.POST.get("reason", ""))
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, "Asked. The limit stays until a second person consents.")
    return redirect("experiment", experiment_id=found.pk)


@require_POST
@for_people
def decide_page(request: HttpRequest, request_id: int, word: str) -> HttpResponse:
    """Consent to a request, refuse it, or withdraw one's own."""
    visible = LimitRequest.objects.filter(experiment__in=experiments_visible_to(request.user)).select_related("experiment")
    row = get_object_or_404(visible, pk=request_id)
    require(request.user, Action.SET_LIMIT, row.experiment)
    try:
        if word == "withdraw":
            withdraw_request(row.pk, by=request.user)
        else:
            decide_request(row.pk, by=request.user, is_granted=word == "grant", note=request.POST.get("note", ""))
    except WriteError as error:
        say_refusal(request, error)
    except NotAllowed as error:
        messages.error(request, f"Not done. {error.detail}")
    else:
        said = {"grant": "You consented: the limit is in force.", "refuse": "Refused: the limit stays as it is."}
        messages.success(request, said.get(word, "Withdrawn."))
    return redirect("experiment", experiment_id=row.experiment_id)
