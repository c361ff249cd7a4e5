"""Runs: the list with its calendar, planning, changing, ending."""

from datetime import date, datetime, timedelta
from typing import Any

from django.conf import settings
from django.contrib import messages
from django.db.models import Prefetch
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.utils import timezone
from django.views.decorators.http import require_http_methods, require_POST, require_safe

from ingest.models import Tap
from labmon.errors import WriteError
from labmon.experiments.models import Experiment
from labmon.people.models import Person, Role
from labmon.people.rights import Action, experiments_visible_to, may, require, stations_visible_to
from labmon.runs.actions import cancel_run, change_run, plan_run, stop_run
from labmon.runs.ledgers import newest_ledgers
from labmon.runs.models import Run
from labmon.runs.queries import RunState, declared_runs, in_state, run_page, runs_visible_to, state_of_run
from labmon.runs.who import may_plan_for_others, require_planning
from labmon.screen.door import for_people, put_refusal, say_refusal
from labmon.screen.experiments import taps_of
from labmon.screen.named import visible_experiment, visible_run
from labmon.screen.run_calendar import DAYS, RoomWeek, Slot, day_bounds, monday_of, week
from labmon.screen.run_forms import RunForm
from labmon.screen.run_view import clock_text, run_row, runs_sentence

PAGE = 50
#: So many runs of a week are drawn, and so many benches; beyond, the page says what is left out.
MOST_IN_WEEK, MOST_BENCHES = 400, 200


@require_safe
@for_people
def runs_page(request: HttpRequest) -> HttpResponse:
    """Runs now, planned and past, and a week of them per bench and room; ``plan`` leads to the form of an experiment."""
    if request.GET.get("plan", "").isdecimal() and len(request.GET["plan"]) < 19:
        return redirect("new-run", experiment_id=int(request.GET["plan"]))
    now, zone = timezone.now(), settings.LAB_ZONE
    visible = runs_visible_to(request.user)
    found, following = run_page(visible, request.GET.get("before", ""), PAGE)
    ledgers = newest_ledgers([run.pk for run in found])
    counts = {state: in_state(visible, state, now).count() for state in (RunState.RUNNING, RunState.PLANNED)}
    monday = monday_of(_day(request.GET.get("week"), now.astimezone(zone).date()))
    rooms, left_out = _week(request.user, monday, now)
    return render(request, "screen/runs.html", {
        "sentence": runs_sentence(counts[RunState.RUNNING], counts[RunState.PLANNED]),
        "rows": [run_row(run, now, zone, ledgers.get(run.pk)) for run in found],
        "following": following,
        "is_first": not request.GET.get("before"),
        "rooms": rooms,
        "left_out": left_out,
        "days": [(day := monday + timedelta(days=number), day == now.astimezone(zone).date()) for number in range(DAYS)],
        "earlier": (monday - timedelta(days=DAYS)).isoformat(),
        "later": (monday + timedelta(days=DAYS)).isoformat(),
        "zone": zone.key,
        "experiments": _plannable(request.user),
    })


def _day(text: str | None, default: date) -> date:
    try:
        day = date.fromisoformat(text or "")
    except ValueError:
        return default
    return day if date(2000, 1, 1) <= day <= date(2100, 1, 1) else default


def _week(person: Person, monday: date, now: datetime) -> tuple[list[RoomWeek], int]:
    """The calendar of what the person may see, and how many runs were too many to draw; a fixed number of queries."""
    bounds = day_bounds(monday, settings.LAB_ZONE)
    touching = declared_runs().filter(experiment__in=experiments_visible_to(person), starts_at__lt=bounds[-1], over__gt=bounds[0])
    taps = Prefetch("taps", Tap.objects.select_related("station__room"))
    runs = list(touching.prefetch_related(taps).order_by("starts_at", "pk")[: MOST_IN_WEEK + 1])
    left_out = max(len(runs) - MOST_IN_WEEK, 0)
    slots, benches = [], set()
    for run in runs[:MOST_IN_WEEK]:
        slot = Slot(run.pk, run.name, run.starts_at, run.over_at, state_of_run(run, now).value)
        for station in {tap.station for tap in run.taps.all()}:
            slots.append((station.name, slot))
            benches.add((station.room.name if station.room else "", station.name))
    rest = stations_visible_to(person).select_related("room").order_by("name")[:MOST_BENCHES]
    benches |= {(one.room.name if one.room else "", one.name) for one in rest}
    return week(sorted(benches), slots, monday, settings.LAB_ZONE), left_out


def _plannable(person: Person) -> list[Experiment]:
    if not may(person, Action.PLAN_RUN):
        return []
    return list(experiments_visible_to(person).order_by("name").only("pk", "name")[:MOST_BENCHES])


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def new_run_page(request: HttpRequest, experiment_id: int) -> HttpResponse:
    """The form for a run of an experiment."""
    experiment = visible_experiment(request.user, experiment_id)
    require(request.user, Action.PLAN_RUN, experiment)
    form = _form(request, experiment, None)
    if request.method == "POST" and form.is_valid():
        typed = form.cleaned_data
        owner = Person.objects.get(username=typed["owner"])
        require_planning(request.user, experiment, owner)
        try:
            made = plan_run(experiment, by=request.user, **_wish(experiment, typed, typed["starts_at"]))
        except WriteError as error:
            put_refusal(form, _on_form(error))
        else:
            messages.success(request, f"{made.name} is planned from {clock_text(made.starts_at, settings.LAB_ZONE)} "
                                      f"to {clock_text(made.over_at, settings.LAB_ZONE)}.")
            return redirect("run", run_id=made.pk)
    status = 422 if request.method == "POST" else 200
    return render(request, "screen/run_form.html", {"form": form, "experiment": experiment, "run": None}, status=status)


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def change_run_page(request: HttpRequest, run_id: int) -> HttpResponse:
    """The form with which a run is changed."""
    run = visible_run(request.user, run_id)
    require(request.user, Action.CHANGE_RUN, run)
    form = _form(request, run.experiment, run)
    if request.method == "POST" and form.is_valid():
        typed = form.cleaned_data
        try:
            change_run(run, by=request.user, reason=typed["reason"],
                       **_wish(run.experiment, typed, typed.get("starts_at", run.starts_at)))
        except WriteError as error:
            put_refusal(form, _on_form(error))
        else:
            messages.success(request, "The run is changed.")
            return redirect("run", run_id=run.pk)
    status = 422 if request.method == "POST" else 200
    return render(request, "screen/run_form.html", {"form": form, "experiment": run.experiment, "run": run}, status=status)


@require_POST
@for_people
def end_run(request: HttpRequest, run_id: int) -> HttpResponse:
    """Stop a run that is under way, cancel one that has not begun."""
    run = visible_run(request.user, run_id)
    require(request.user, Action.CHANGE_RUN, run)
    is_planned = state_of_run(run, timezone.now()) is RunState.PLANNED
    try:
        (cancel_run if is_planned else stop_run)(run, by=request.user, reason=request.POST.get("reason", "")[:500])
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, "The run is cancelled." if is_planned else "The run is stopped; its ledger follows.")
    return redirect("run", run_id=run.pk)


def _form(request: HttpRequest, experiment: Experiment, run: Run | None) -> RunForm:
    typed = request.POST or None
    light = [name for name, tap in taps_of(experiment).items() if tap.kind != "climate"]
    owners = [request.user]
    if run is not None or may_plan_for_others(request.user, experiment):
        others = Person.objects.filter(is_active=True).exclude(role=Role.GUEST).order_by("username")
        owners += [one for one in others if one.pk != request.user.pk]
    is_begun = run is not None and run.starts_at <= timezone.now()
    usual = {"taps": light, "owner": request.user.username, "starts_at": _evening(), "length_h": "12"}
    shown = usual if run is None else _shown(run)
    return RunForm(typed, initial=shown, experiment=experiment, owners=owners, taps=light, is_new=run is None, is_begun=is_begun)


def _evening() -> str:
    """20:00 of today, or of tomorrow when it is later."""
    now = timezone.now().astimezone(settings.LAB_ZONE)
    day = now.date() if now.hour < 20 else now.date() + timedelta(days=1)
    return f"{day.isoformat()}T20:00"


def _shown(run: Run) -> dict[str, Any]:
    length_h = (run.ends_at - run.starts_at).total_seconds() / 3600
    starts_at = f"{run.starts_at.astimezone(settings.LAB_ZONE):%Y-%m-%dT%H:%M}"
    return {
        "name": run.name, "starts_at": starts_at, "length_h": f"{length_h:g}",
        "taps": [f"{tap.station.name}/{tap.name}" for tap in run.taps.select_related("station")],
        "owner": run.owner.username if run.owner else "", "deputy": run.deputy.username if run.deputy else "",
        "allowed_below_s": f"{run.allowed_below_s:g}", "wanted_trusted_pct": f"{100 * run.wanted_trusted_share:g}",
    }


def _wish(experiment: Experiment, typed: dict[str, Any], starts_at: datetime) -> dict[str, Any]:
    """What the form says, as the actions take it."""
    taps = taps_of(experiment)
    wish: dict[str, Any] = {
        "name": typed["name"],
        "ends_at": starts_at + timedelta(seconds=round(3600 * typed["length_h"])),
        "owner": Person.objects.get(username=typed["owner"]),
        "deputy": Person.objects.get(username=typed["deputy"]) if typed["deputy"] else None,
    }
    if "starts_at" in typed:
        wish |= {"starts_at": starts_at, "taps": [taps[name] for name in typed["taps"]],
                 "allowed_below_s": typed["allowed_below_s"], "wanted_trusted_share": typed["wanted_trusted_pct"] / 100}
    return wish


def _on_form(error: WriteError) -> WriteError:
    """The same refusal at the field that the form has for it."""
    field = {"ends_at": "length_h", "wanted_trusted_share": "wanted_trusted_pct", "run": "name"}.get(error.field, error.field)
    return WriteError(field, error.why, error.do)
