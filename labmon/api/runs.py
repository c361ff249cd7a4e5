"""Runs: planned, changed, stopped, cancelled, listed."""

from datetime import datetime, timedelta
from typing import Any

from django.db.models import Q
from django.http import HttpRequest, HttpResponse
from django.utils import timezone

from labmon.api.answer import json_answer
from labmon.api.body import Body, Text, body_of
from labmon.api.named import experiment_named, tap_in_body, tap_path
from labmon.api.problem import not_found, wrong_field
from labmon.api.query import known_only, one_of, whole_number
from labmon.api.run_shapes import RUN_STATES
from labmon.api.times import parse_time, rfc3339
from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.people.rights import Action, experiments_visible_to, require
from labmon.runs.actions import cancel_run, change_run, plan_run, stop_run
from labmon.runs.limits import ruling_limits
from labmon.runs.models import Run
from labmon.runs.queries import RunState, in_state, run_page, runs_visible_to, state_of_run
from labmon.runs.who import require_planning

LARGEST_ID = 2**63 - 1


def get_runs(request: HttpRequest, person: Person) -> HttpResponse:
    """Runs that the caller may see, latest start first; ``before`` leads on."""
    known_only(request.GET, "experiment", "state", "before", "count")
    rows = runs_visible_to(person)
    if request.GET.get("experiment"):
        number = whole_number(request.GET, "experiment", default=0, most=LARGEST_ID)
        rows = rows.filter(experiment=experiment_named(person, number))
    state = one_of(request.GET, "state", RUN_STATES, default="")
    if state:
        rows = in_state(rows, RunState(state), timezone.now())
    found, following = run_page(rows, request.GET.get("before", ""), whole_number(request.GET, "count", default=100, most=1000))
    return json_answer({"runs": [run_facts(row) for row in found], "next": following})


def get_run(request: HttpRequest, person: Person, run_id: int) -> HttpResponse:
    """One run."""
    known_only(request.GET)
    return json_answer(_whole(run_named(person, run_id)))


def run_named(person: Person, run_id: int) -> Run:
    """The run of an address; 404 where it is not there or not for this person."""
    rows = runs_visible_to(person).select_related("experiment", "owner", "deputy", "planned_by").prefetch_related("taps__station")
    run = rows.filter(pk=run_id).first()
    if run is None:
        raise not_found("There is no such run for you.", "GET /api/v1/runs lists those that you may see.")
    return run


def run_facts(run: Run) -> dict[str, Any]:
    """A run as the document names it."""
    names = {name: person.username if (person := getattr(run, name)) else None for name in ("owner", "deputy", "planned_by")}
    times = {name: rfc3339(getattr(run, name)) for name in ("starts_at", "ends_at", "ended_at", "cancelled_at", "planned_at")}
    plain = ("name", "allowed_below_s", "wanted_trusted_share", "end_reason", "cancel_reason")
    return {"id": run.pk, "experiment": run.experiment_id, "state": state_of_run(run, timezone.now()).value, **names, **times,
            "taps": sorted(tap_path(tap) for tap in run.taps.all()), **{name: getattr(run, name) for name in plain},
            "length_s": round((run.over_at - run.starts_at).total_seconds())}


def _whole(run: Run) -> dict[str, Any]:
    """A run with the limits that rule in it."""
    return run_facts(run) | {"limits": _limits(run)}


def _limits(run: Run) -> list[dict[str, Any]]:
    return [{"limit": one.limit.pk, "tap": tap_path(one.limit.tap), "quantity": one.limit.quantity, "version": one.version.number,
             "alarm": one.version.alarm, "warning": one.version.warning, "from": rfc3339(one.from_at),
             "until": rfc3339(one.until_at)} for one in ruling_limits(run)]


class NewRun(Body):
    """The body of POST /runs."""

    experiment: int | Text
    name: Text
    starts_at: Text
    ends_at: Text | None = None
    length_s: float | None = None
    taps: list[Text] | None = None
    owner: Text | None = None
    deputy: Text | None = None
    allowed_below_s: float = 0.0
    wanted_trusted_share: float = 0.95


def post_run(request: HttpRequest, person: Person) -> HttpResponse:
    """A new run; it belongs to the caller unless ``owner`` says otherwise."""
    known_only(request.GET)
    wish = body_of(request, NewRun)
    experiment = _experiment(person, wish.experiment)
    owner = _person("owner", wish.owner) or person
    require_planning(person, experiment, owner)
    starts_at = _time("starts_at", wish.starts_at)
    run = plan_run(experiment, by=person, name=wish.name, starts_at=starts_at, ends_at=_end(wish, starts_at),
                   taps=_taps(person, wish.taps), owner=owner, deputy=_person("deputy", wish.deputy),
                   allowed_below_s=wish.allowed_below_s, wanted_trusted_share=wish.wanted_trusted_share)
    return json_answer(_whole(run_named(person, run.pk)), status=201)


def _experiment(person: Person, said: int | str) -> Experiment:
    """By id or by name, as far as the caller may see it."""
    rows = experiments_visible_to(person).select_related("owner")
    if isinstance(said, int):
        found = rows.filter(pk=said).first() if 0 < said <= LARGEST_ID else None
    else:
        found = None if "\0" in said else rows.filter(name=said).first()
    if found is None:
        raise not_found("There is no such experiment for you.", "GET /api/v1/experiments lists those that you may see.")
    return found


def _end(wish: NewRun, starts_at: datetime) -> datetime:
    if (wish.ends_at is None) == (wish.length_s is None):
        raise wrong_field("ends_at", "Give either ends_at or length_s.", "One of them says when the run ends.")
    if wish.ends_at is not None:
        return _time("ends_at", wish.ends_at)
    if not 0 < wish.length_s <= 31 * 86_400:
        raise wrong_field("length_s", f"{wish.length_s!r} s is no length of a run.", "Give 60 s to 31 days.")
    return starts_at + timedelta(seconds=wish.length_s)


class RunChange(Body):
    """The body of PATCH /runs/{id}: what is left out stays."""

    name: Text | None = None
    starts_at: Text | None = None
    ends_at: Text | None = None
    taps: list[Text] | None = None
    owner: Text | None = None
    deputy: Text | None = None
    allowed_below_s: float | None = None
    wanted_trusted_share: float | None = None
    reason: Text = ""


def patch_run(request: HttpRequest, person: Person, run_id: int) -> HttpResponse:
    """Change a run; its owner, deputy and the experiment's owner may."""
    known_only(request.GET)
    run = run_named(person, run_id)
    require(person, Action.CHANGE_RUN, run)
    wish = body_of(request, RunChange)
    values: dict[str, Any] = {name: value for name in ("name", "allowed_below_s", "wanted_trusted_share")
                              if (value := getattr(wish, name)) is not None}
    values |= {name: _time(name, text) for name in ("starts_at", "ends_at") if (text := getattr(wish, name)) is not None}
    values |= {name: _person(name, text) for name in ("owner", "deputy") if (text := getattr(wish, name)) is not None}
    if wish.taps is not None:
        values["taps"] = _taps(person, wish.taps)
    change_run(run, by=person, reason=wish.reason, **values)
    return json_answer(_whole(run_named(person, run_id)))


class RunReason(Body):
    """The body of stop and cancel."""

    reason: Text = ""


def post_stop(request: HttpRequest, person: Person, run_id: int) -> HttpResponse:
    """End a run that is under way, now."""
    return _ended(request, person, run_id, stop_run)


def post_cancel(request: HttpRequest, person: Person, run_id: int) -> HttpResponse:
    """Take back a run that has not begun."""
    return _ended(request, person, run_id, cancel_run)


def _ended(request: HttpRequest, person: Person, run_id: int, action: Any) -> HttpResponse:
    known_only(request.GET)
    run = run_named(person, run_id)
    require(person, Action.CHANGE_RUN, run)
    action(run, by=person, reason=body_of(request, RunReason).reason if request.body else "")
    return json_answer(_whole(run_named(person, run_id)))


def _taps(person: Person, paths: list[str] | None) -> Any:
    if paths is None:
        return None
    return [tap_in_body(person, path, field=f"taps[{number}]") for number, path in enumerate(paths)]


def _person(field: str, username: str | None) -> Person | None:
    if not username:
        return None
    found = None if "\0" in username else Person.objects.filter(Q(username=username, is_active=True)).first()
    if found is None:
        raise wrong_field(field, f"There is nobody called {username[:60]!r}.", "Use the name that they sign in with.")
    return found


def _time(field: str, text: str) -> datetime:
    try:
        return parse_time(text)
    except ValueError as error:
        raise wrong_field(field, f"{field} cannot be used.", f"{str(error)[:1].upper()}{str(error)[1:]}.") from None
