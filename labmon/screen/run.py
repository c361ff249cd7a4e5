"""A run's own page: what was wished before it, how it goes while it lasts, its ledger after it."""

import csv
import io
from datetime import datetime
from typing import Any

import numpy as np
from django.conf import settings
from django.contrib import messages
from django.db.models import QuerySet
from django.http import HttpRequest, HttpResponse, HttpResponseBase
from django.shortcuts import get_object_or_404, redirect, render
from django.utils import timezone
from django.utils.safestring import SafeString, mark_safe
from django.views.decorators.http import require_POST, require_safe

from analysis.judge.ledger import Intervals, Totals
from analysis.judge.ledger_change import change_between
from analysis.judge.ledger_tap import LedgerClass
from analysis.judge.margin import margin_of
from analysis.judge.rule import Quantity
from analysis.quantities import US_PER_S
from analysis.record.rollups import history
from ingest.models import Station
from ingest.times import us_of
from labmon.alarms.models import Alarm
from labmon.alarms.queries import alarm_rows
from labmon.benches.queries import station_facts
from labmon.errors import WriteError
from labmon.events.chain import chains_of
from labmon.logbook.queries import entries_of_run
from labmon.people.models import Role
from labmon.people.rights import Action, may, require, role_of
from labmon.runs.ledgers import Unusable, ask_ledger, interval_rows, ledger_of, ledgers_of, newest_ledger, stretches
from labmon.runs.limits import RulingLimit, ruling_limits
from labmon.runs.models import Run, RunLedger, RunSoFar
from labmon.runs.queries import RunState, state_of_run
from labmon.runs.so_far import intervals_so_far, totals_so_far
from labmon.runs.watch import limits_ahead
from labmon.screen.alarm_view import alarm_view
from labmon.screen.clearance import run_clearance_context
from labmon.screen.door import for_people, put_refusal, say_refusal
from labmon.screen.log import entry_views
from labmon.screen.named import visible_run
from labmon.screen.present import number_text, time_text
from labmon.screen.run_forms import LedgerForm
from labmon.screen.run_timeline import STEPS, Profile, spoken, timeline
from labmon.screen.run_view import (
    ahead_words,
    class_rows,
    clock_text,
    duration_text,
    figure_rows,
    has_held,
    interval_row,
    longest_text,
    run_sentence,
    totals_of_ledger,
)
from labmon.screen.station_view import tap_view

MOST_INTERVALS = 200
_UNITS = {Quantity.ER_DB.value: "dB", Quantity.ANGLE_DEG.value: "°", Quantity.POWER_W.value: "W", Quantity.DOP.value: ""}
_NAMES = {Quantity.ER_DB.value: "extinction ratio", Quantity.ANGLE_DEG.value: "angle", Quantity.POWER_W.value: "power",
          Quantity.DOP.value: "degree of polarization"}


@require_safe
@for_people
def run_page(request: HttpRequest, run_id: int) -> HttpResponse:
    """The run as it stands; after its end the ledger (``version`` chooses an earlier one)."""
    return _show(request, visible_run(request.user, run_id), LedgerForm(), 200)


@require_POST
@for_people
def new_ledger(request: HttpRequest, run_id: int) -> HttpResponse:
    """Ask for the next version of the ledger."""
    run = visible_run(request.user, run_id)
    require(request.user, Action.CHANGE_RUN, run)
    form = LedgerForm(request.POST)
    if form.is_valid():
        typed = form.cleaned_data
        spans = [Unusable(typed["from_at"], typed["until_at"], typed["why"])] if typed["from_at"] else []
        try:
            ledger = ask_ledger(run, by=request.user, reason=typed["reason"], unusable=spans)
        except WriteError as error:
            if error.field == "run":
                say_refusal(request, error)
                return redirect("run", run_id=run.pk)
            put_refusal(form, WriteError({"unusable": "from_at"}.get(error.field, error.field), error.why, error.do))
        else:
            messages.success(request, f"Version {ledger.number} is being made; the earlier ones stay.")
            return redirect("run", run_id=run.pk)
    return _show(request, run, form, 422)


@require_safe
@for_people
def ledger_csv(request: HttpRequest, run_id: int, ledger_number: int) -> HttpResponseBase:
    """A version's intervals as a table: times in UTC, point decimals."""
    run = visible_run(request.user, run_id)
    ledger = get_object_or_404(run.ledgers.exclude(made_at=None), number=ledger_number)
    out = io.StringIO()
    write = csv.writer(out).writerow
    write(["from_utc", "until_utc", "length_s", "class", "doubtful", "reasons", "taps"])
    for row in interval_rows(ledger):
        write([f"{at:%Y-%m-%dT%H:%M:%SZ}" for at in (row.from_at, row.until_at)]
              + [row.length_s, row.klass.words, int(row.is_doubtful), "; ".join(row.reasons), " ".join(row.taps)])
    name = f"run-{run.pk}-ledger-{ledger.number}.csv"
    return HttpResponse(out.getvalue(), content_type="text/csv; charset=utf-8",
                        headers={"Content-Disposition": f'attachment; filename="{name}"'})


def _show(request: HttpRequest, run: Run, form: LedgerForm, status: int) -> HttpResponse:
    now, zone = timezone.now(), settings.LAB_ZONE
    state = state_of_run(run, now)
    rulings = ruling_limits(run)
    ledger = _chosen(request, run) if state is RunState.OVER else None
    so_far = RunSoFar.objects.filter(run=run).first() if state is RunState.RUNNING else None
    totals, intervals = _account(ledger, so_far)
    may_change = may(request.user, Action.CHANGE_RUN, run)
    may_export = may(request.user, Action.EXPORT, run.experiment)
    alarms = [] if state is RunState.PLANNED else [alarm_view(row, now) for row in alarm_rows(request.user, in_run=run, limit=50)]
    return render(request, "screen/run.html", {
        "run": run, "state": state.value, "sentence": run_sentence(run, now, totals), "zone": zone.key,
        "starts": clock_text(run.starts_at, zone), "ends": clock_text(run.over_at, zone),
        "starts_utc": time_text(run.starts_at), "ends_utc": time_text(run.over_at),
        "length": duration_text((run.over_at - run.starts_at).total_seconds()),
        "was_declared_late": run.planned_at > run.starts_at, "planned_utc": time_text(run.planned_at),
        "wanted_share": number_text(100 * run.wanted_trusted_share, 1, "%"), "allowed": duration_text(run.allowed_below_s),
        "limits": [_limit_words(one, run) for one in rulings],
        "may_change": may_change, "may_export": may_export,
        "may_acknowledge": may(request.user, Action.ACKNOWLEDGE, run.experiment),
        "taps": _taps(run, now) if state is RunState.RUNNING else [],
        "ahead": _ahead(rulings, now) if state is RunState.RUNNING else [],
        "on_call": _on_call(request, run, max(now, run.starts_at)) if state in (RunState.RUNNING, RunState.PLANNED) else [],
        "totals": totals, "classes": class_rows(totals) if totals else [],
        "doubtful": duration_text(totals.doubtful_s) if totals and totals.doubtful_s else "",
        "has_held": totals is not None and has_held(run, totals), "so_far": so_far,
        "through": time_text(so_far.through_at) if so_far else "",
        "line": _line(run, rulings, intervals, totals),
        "tap_ids": " ".join(str(pk) for pk in run.run_taps.values_list("tap_id", flat=True)),
        "waiting": [view for view in alarms if view.is_waiting], "alarms": [view for view in alarms if not view.is_waiting],
        "log": [] if state is RunState.PLANNED else entry_views(request.user, entries_of_run(request.user, run)),
        "log_benches": _benches(run) if may(request.user, Action.LOG, run.experiment) else [],
        "form": form if may_change and state is RunState.OVER else None,
        **(run_clearance_context(run) if state is RunState.PLANNED else {}),
        **_ledger_shown(request, run, ledger, intervals),
    }, status=status)


def _chosen(request: HttpRequest, run: Run) -> RunLedger | None:
    number = request.GET.get("version", "")
    if number.isascii() and number.isdigit() and len(number) < 9:
        found = ledger_of(run, int(number))
        if found is not None and found.made_at:
            return found
    return newest_ledger(run)


def _account(ledger: RunLedger | None, so_far: RunSoFar | None) -> tuple[Totals | None, Intervals | None]:
    if ledger is not None:
        return totals_of_ledger(ledger), stretches(ledger)
    if so_far is not None:
        return totals_so_far(so_far), intervals_so_far(so_far)
    return None, None


def _limit_words(one: RulingLimit, run: Run) -> str:
    side = "at most" if one.limit.quantity == Quantity.ANGLE_DEG else "at least"
    name, unit = _NAMES.get(one.limit.quantity, one.limit.quantity), _UNITS.get(one.limit.quantity, "")
    words = f"{one.limit.tap.station.name}/{one.limit.tap.name}: {name} {side} {number_text(one.version.alarm, 1, unit)}"
    if one.from_at > run.starts_at or one.until_at < run.over_at:
        words += f" from {time_text(one.from_at)} to {time_text(one.until_at)}"
    if one.from_at > run.starts_at:
        words += f", set by {one.version.set_by.username if one.version.set_by else 'labmon'}"
        words += f" (“{one.version.reason}”)" if one.version.reason else ""
    return words


def _taps(run: Run, now: datetime) -> list[dict[str, Any]]:
    """The run's taps as the station page shows them; a few queries for each bench of the run."""
    wanted = set(run.run_taps.values_list("tap_id", flat=True))
    stations: QuerySet[Station] = Station.objects.filter(taps__in=wanted).select_related("room").distinct().order_by("name")
    return [{"station": station.name, "view": tap_view(tap, now)}
            for station in stations for tap in station_facts(station).taps if tap.id in wanted]


def _benches(run: Run) -> list[str]:
    return list(Station.objects.filter(taps__in=run.taps.all()).distinct().order_by("name").values_list("name", flat=True))


def _on_call(request: HttpRequest, run: Run, at: datetime) -> list[str]:
    """Who is told of an alarm of the run, first first; guests see the duties only."""
    chain = chains_of([Alarm(pk=-1, experiment=run.experiment)], at)[-1]
    told = [one for rung in chain for one in rung if one.person is not None]
    if role_of(request.user) is Role.GUEST:
        return list(dict.fromkeys(one.duty for one in told))
    return [f"{one.person.username} ({one.duty})" for one in told if one.person]


def _ahead(rulings: list[RulingLimit], now: datetime) -> list[tuple[str, str]]:
    ruling_now = [one for one in rulings if one.from_at <= now < one.until_at]
    return [(f"{_NAMES[one.ruling.limit.quantity]} of {one.ruling.limit.tap.station.name}/{one.ruling.limit.tap.name}",
             ahead_words(one, _UNITS[one.ruling.limit.quantity])) for one in limits_ahead(ruling_now, us_of(now))]


def _line(
    run: Run, rulings: list[RulingLimit], intervals: Intervals | None, totals: Totals | None
) -> list[tuple[str, SafeString]]:
    """The margin profile of each ER or angle limit's tap over the run; the classes are those of the whole account."""
    if intervals is None or totals is None:
        return []
    length_s = round((run.over_at - run.starts_at).total_seconds())
    told = spoken([(row.word, row.time) for row in class_rows(totals)])
    lines, seen = [], set()
    for one in rulings:
        if one.limit.quantity not in (Quantity.ER_DB, Quantity.ANGLE_DEG) or one.limit.pk in seen:
            continue
        seen.add(one.limit.pk)
        name = f"{one.limit.tap.station.name}/{one.limit.tap.name}"
        profile = Profile(name, _margins(run, [other for other in rulings if other.limit.pk == one.limit.pk]))
        lines.append((name, mark_safe(timeline(profile, intervals, length_s, f"{name}: {told}"))))
    return lines or [("", mark_safe(timeline(None, intervals, length_s, told)))]


def _margins(run: Run, rulings: list[RulingLimit]) -> Any:
    """Margin, dB, of the worst reading in each step of the run."""
    quantity = Quantity(rulings[0].limit.quantity)
    begin_us, end_us = us_of(run.starts_at), us_of(run.over_at)
    curve = history(rulings[0].limit.tap_id, quantity.value, begin_us, end_us, STEPS // 2)
    if not len(curve.at_us):
        return np.full(STEPS // 2, np.nan)
    worst = curve.max if quantity.is_bad_above else curve.min
    level = np.full(len(worst), np.nan)
    for one in rulings:
        ends_us = curve.at_us + curve.bucket_s * US_PER_S
        level[(ends_us > us_of(one.from_at)) & (curve.at_us < us_of(one.until_at))] = one.version.alarm
    margin = margin_of(quantity, worst, level).margin_db
    middle_us = begin_us + (2 * np.arange(STEPS // 2) + 1) * (end_us - begin_us) // STEPS
    bucket = ((middle_us - curve.at_us[0]) // round(curve.bucket_s * US_PER_S)).astype(np.int64)
    inside = (bucket >= 0) & (bucket < len(margin))
    steps = np.where(inside, margin[bucket.clip(0, len(margin) - 1)], np.nan)  # a bucket may be longer than a step, or shorter:
    place = ((curve.at_us - begin_us) * len(steps) // (end_us - begin_us)).clip(0, len(steps) - 1)
    known = np.isfinite(margin)
    np.fmin.at(steps, place[known], margin[known])
    return steps


def _ledger_shown(request: HttpRequest, run: Run, ledger: RunLedger | None, intervals: Intervals | None) -> dict[str, Any]:
    versions = ledgers_of(run)
    waiting = next((one for one in versions if not one.made_at), None)
    if ledger is None or intervals is None:
        return {"ledger": None, "versions": versions, "in_work": waiting}
    is_bad = intervals.klass != LedgerClass.GOOD
    bad = Intervals(*(getattr(intervals, name)[is_bad][:MOST_INTERVALS] for name in Intervals.__dataclass_fields__))
    return {
        "ledger": ledger, "versions": versions, "in_work": waiting,
        "intervals": [interval_row(row) for row in interval_rows(ledger, bad)],
        "left_out": max(int(np.count_nonzero(is_bad)) - MOST_INTERVALS, 0),
        "figures": figure_rows(ledger), "longest": longest_text(ledger),
        "change": _change(run, ledger, intervals), "facts": ledger.facts,
        "zeros": [(tap["tap"], one) for tap in ledger.facts["taps"] for one in tap["calibrations"]],
    }


def _change(run: Run, ledger: RunLedger, intervals: Intervals) -> list[tuple[str, str, str]]:
    """What became of the seconds of the version before."""
    before = ledger_of(run, ledger.number - 1)
    if before is None or not before.made_at:
        return []
    counts = change_between(stretches(before), intervals).counts
    return [(one.words, other.words, duration_text(int(counts[one, other])))
            for one in LedgerClass for other in LedgerClass if one is not other and counts[one, other]]
