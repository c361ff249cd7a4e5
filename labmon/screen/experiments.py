"""Experiments: the list, a new one, and one with its limits."""

import json
from datetime import datetime
from typing import Any, Final

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import get_object_or_404, redirect, render
from django.utils import timezone
from django.views.decorators.http import require_http_methods, require_POST, require_safe

from ingest.models import Tap
from ingest.times import SECOND_US, now_us
from labmon.ahead.queries import ahead_of
from labmon.alarms.queries import alarm_rows
from labmon.errors import NotAllowed, SecondPersonNeeded, WriteError
from labmon.experiments.actions import create_experiment, retire_limit, set_limit
from labmon.experiments.floors import floors_of
from labmon.experiments.models import Experiment
from labmon.experiments.proposals import proposal_facts
from labmon.experiments.queries import LimitFacts, experiment_facts, experiment_rows
from labmon.experiments.rehearsal import present_hosts, rehearse_limit
from labmon.experiments.rules import LimitWish
from labmon.logbook.queries import log_entries
from labmon.people.models import Person, Role
from labmon.people.rights import Action, may, require, role_of, taps_visible_to
from labmon.runs.queries import run_now
from labmon.screen.ahead_view import ahead_words
from labmon.screen.alarm_view import alarm_view
from labmon.screen.clearance import clearance_context
from labmon.screen.door import for_people, put_refusal, say_refusal
from labmon.screen.experiment_view import experiment_sentence, experiments_sentence, ladder, limit_view
from labmon.screen.forms import ExperimentForm, LimitForm
from labmon.screen.holds import holds_shown
from labmon.screen.limit_requests import requests_shown
from labmon.screen.log import entry_views
from labmon.screen.log_view import EntryView
from labmon.screen.named import visible_experiment
from labmon.screen.present import age_text
from labmon.screen.rehearsal_view import RehearsalView, rehearsal_view

RECENT_ALARMS = 30
RECENT_ENTRIES = 8
USUAL_SILENCE_S = 60.0
REHEARSED_US: Final = 30 * 86_400 * SECOND_US


@require_safe
@for_people
def experiments_page(request: HttpRequest) -> HttpResponse:
    """All experiments the reader may see."""
    rows = experiment_rows(request.user)
    return render(
        request,
        "screen/experiments.html",
        {"rows": rows, "sentence": experiments_sentence(rows), "may_make": bool(_own_taps(request.user))},
    )


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def new_experiment_page(request: HttpRequest) -> HttpResponse:
    """The form for a new experiment: managers any taps, owners those of their benches."""
    taps = _own_taps(request.user)
    if not taps:
        raise NotAllowed("You may not make an experiment. Ask a bench's owner or a lab manager.")
    form = ExperimentForm(request.POST or None, taps=list(taps))
    if request.method == "POST" and form.is_valid():
        typed = form.cleaned_data
        try:
            made = create_experiment(
                typed["name"],
                [taps[name] for name in typed["taps"]],
                by=request.user,
                no_reading_after_s=typed["no_reading_after_s"],
                untrusted_after_s=typed["untrusted_after_s"],
            )
        except WriteError as error:
            put_refusal(form, error)
        else:
            messages.success(request, f"{made.name} is made. Now set its limits.")
            return redirect("experiment", experiment_id=made.pk)
    return render(request, "screen/experiment_new.html", {"form": form}, status=422 if request.method == "POST" else 200)


@require_safe
@for_people
def experiment_page(request: HttpRequest, experiment_id: int) -> HttpResponse:
    """One experiment: how it stands, its limits with their history, its alarms."""
    found = visible_experiment(request.user, experiment_id)
    return _show(request, found, limit_form(found) if may(request.user, Action.SET_LIMIT, found) else None)


@require_POST
@for_people
def set_limit_page(request: HttpRequest, experiment_id: int) -> HttpResponse:
    """A new version of a limit, or the first."""
    found = visible_experiment(request.user, experiment_id)
    require(request.user, Action.SET_LIMIT, found)
    form = limit_form(found, request.POST)
    if form.is_valid():
        typed = dict(form.cleaned_data)
        tap = taps_of(found)[typed.pop("tap")]
        try:
            set_limit(found, tap, typed.pop("quantity"), **typed, by=request.user)
        except SecondPersonNeeded as error:
            put_refusal(form, error)
            return _show(request, found, form, status=422, may_ask=True)
        except WriteError as error:
            put_refusal(form, error)
        else:
            messages.success(request, "The limit is in force from now on.")
            return redirect("experiment", experiment_id=found.pk)
    return _show(request, found, form, status=422)


def show_refused(request: HttpRequest, experiment: Experiment, form: LimitForm, error: WriteError | None) -> HttpResponse:
    """The page again with what was typed and why it was refused."""
    if error is not None:
        put_refusal(form, error)
    return _show(request, experiment, form, status=422)


@require_POST
@for_people
def rehearse_limit_page(request: HttpRequest, experiment_id: int) -> HttpResponse:
    """What the limit in the form would have done in the last 30 days; writes nothing."""
    found = visible_experiment(request.user, experiment_id)
    require(request.user, Action.SET_LIMIT, found)
    form = limit_form(found, request.POST)
    form.fields["reason"].required = False
    rehearsal = None
    if form.is_valid():
        try:
            rehearsal = _rehearsed(found, form.cleaned_data)
        except WriteError as error:
            put_refusal(form, error)
    if "X-Labmon-Part" in request.headers:
        return render(request, "screen/_rehearsal.html", {"rehearsal": rehearsal}, status=200 if rehearsal else 422)
    return _show(request, found, form, 200 if rehearsal else 422, rehearsal)


def _rehearsed(experiment: Experiment, typed: dict[str, Any]) -> RehearsalView:
    tap = taps_of(experiment)[typed["tap"]]
    own = {name: typed[name] for name in ("alarm", "warning", "on_delay_s", "off_delay_s", "deadband", "window_s")}
    standing = [
        limit.alarm
        for limit in experiment_facts(experiment).limits
        if (limit.tap_id, limit.quantity) == (tap.pk, typed["quantity"]) and not limit.is_retired
    ]
    clock_us = now_us()
    found = rehearse_limit(
        tap, typed["quantity"], LimitWish(**own), clock_us - REHEARSED_US, clock_us, clock_us, hard=next(iter(standing), None),
        hosts=present_hosts(experiment, tap),
    )
    return rehearsal_view(found)


@require_POST
@for_people
def retire_limit_page(request: HttpRequest, experiment_id: int, limit_id: int) -> HttpResponse:
    """End a limit; its history stays."""
    found = visible_experiment(request.user, experiment_id)
    require(request.user, Action.SET_LIMIT, found)
    limit = get_object_or_404(found.limits, pk=limit_id)
    try:
        retire_limit(limit, by=request.user, reason=request.POST.get("reason", "").strip()[:500])
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, "The limit is retired.")
    return redirect("experiment", experiment_id=found.pk)


def _show(request: HttpRequest, experiment: Experiment, form: LimitForm | None, status: int = 200,
          rehearsal: RehearsalView | None = None, *, may_ask: bool = False) -> HttpResponse:
    facts = experiment_facts(experiment)
    now = timezone.now()
    alarms = [alarm_view(row, now) for row in alarm_rows(request.user, experiment=experiment.pk, limit=RECENT_ALARMS)]
    taps = list(taps_of(experiment).values())
    floors = floors_of(taps)
    return render(
        request,
        "screen/experiment.html",
        {
            "experiment": experiment,
            "limits": [limit_view(limit, floors.get((limit.tap_id, limit.quantity))) for limit in facts.limits],
            "run": run_now(experiment),
            "ahead": _ahead(facts.limits, now),
            "may_ask": may_ask,
            "proposals": json.dumps(proposal_facts()),
            **requests_shown(request, experiment, may_set=form is not None),
            "taps": taps,
            "form": form,
            "sentence": experiment_sentence(experiment.name, facts.limits, alarms),
            "may_set": form is not None,
            "may_acknowledge": may(request.user, Action.ACKNOWLEDGE, experiment),
            "tap_ids": " ".join(str(tap.pk) for tap in taps),
            "waiting": [view for view in alarms if view.is_waiting],
            "log": _log_of(request, taps),
            "alarms": [view for view in alarms if not view.is_waiting],
            "ladder": ladder(),
            "rehearsal": rehearsal,
            **({} if "X-Labmon-Part" in request.headers else clearance_context(experiment)),
            **_holds_of(request, experiment, now),
            "silence": age_text(experiment.no_reading_after_s or USUAL_SILENCE_S),
            "untrusted": age_text(experiment.untrusted_after_s),
        },
        status=status,
    )


def _log_of(request: HttpRequest, taps: list[Tap]) -> list[EntryView]:
    """What was written of late about the benches that the experiment watches."""
    names = {tap.station.name for tap in taps}
    return entry_views(request.user, log_entries(request.user, stations=names, limit=RECENT_ENTRIES)) if names else []


def _holds_of(request: HttpRequest, experiment: Experiment, now: datetime) -> dict[str, Any]:
    """The banner, for the taps that the experiment watches."""
    shown = holds_shown(request, now)
    names = set(taps_of(experiment))
    return shown | {"holds": [hold for hold in shown["holds"] if hold.tap in names]}


def _ahead(limits: list[LimitFacts], now: datetime) -> list[tuple[str, str, str]]:
    """Per limit on ER or angle: its tap, the time to it in words, the back-test."""
    found = ahead_of(limit.limit_id for limit in limits)
    return [(limit.tap_name, said, tested) for limit in limits for said, tested in ahead_words([limit], found, now)]


def limit_form(experiment: Experiment, typed=None) -> LimitForm:
    """The form for a limit of the experiment."""
    return LimitForm(typed, taps=[name for name, tap in taps_of(experiment).items() if tap.kind != "climate"])


def taps_of(experiment: Experiment) -> dict[str, Tap]:
    """Taps that the experiment watches, by ``station/tap``."""
    return {
        f"{tap.station.name}/{tap.name}": tap
        for tap in experiment.taps.select_related("station").order_by("station__name", "name")
    }


def _own_taps(person: Person) -> dict[str, Tap]:
    """Taps this person may put into a new experiment."""
    taps = taps_visible_to(person).select_related("station").order_by("station__name", "name")
    if role_of(person) is Role.OWNER:
        taps = taps.filter(station__bench__owner=person)
    elif role_of(person) is not Role.MANAGER:
        return {}
    return {f"{tap.station.name}/{tap.name}": tap for tap in taps}
