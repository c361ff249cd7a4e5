"""Will it hold? A page of its own for any length and start; the experiment's page has the usual question answered."""

from datetime import UTC, datetime
from typing import Any, Final

from django import forms
from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.utils import timezone
from django.views.decorators.http import require_safe

from ingest.times import us_of
from labmon.clearance.ask import checked_question, clearance_of
from labmon.clearance.checklist import checklist
from labmon.clearance.limits import limits_at
from labmon.clearance.of_run import run_clearance
from labmon.errors import WriteError
from labmon.experiments.models import Experiment
from labmon.runs.models import Run
from labmon.screen.clearance_view import ClearanceView, clearance_view
from labmon.screen.door import for_people, put_refusal
from labmon.screen.forms import Number
from labmon.screen.named import visible_experiment

USUAL_LENGTH_H: Final = 12.0
#: More limits than this are not asked about unasked: each costs some tens of milliseconds.
MOST_UNASKED: Final = 4


class ClearanceForm(forms.Form):
    """The question."""

    length_h = Number(label="Length, h", help_text="How long the run lasts.")
    start = forms.CharField(label="Start (UTC)", required=False, help_text="Like 2031-03-04 20:00; empty: now.", max_length=40)
    allowed_s = Number(label="Seconds beyond", required=False, help_text="How long in all the run bears it beyond the limit; "
                                                                         "empty: not at all.")

    def clean_start(self) -> datetime | None:
        """The moment in UTC; None for now."""
        typed = self.cleaned_data["start"].strip()
        if not typed:
            return None
        try:
            at = datetime.fromisoformat(typed)
        except ValueError:
            raise forms.ValidationError(f"{typed[:40]!r} is no time. Write it like 2031-03-04 20:00.") from None
        return at.replace(tzinfo=UTC) if at.tzinfo is None else at.astimezone(UTC)


@require_safe
@for_people
def clearance_page(request: HttpRequest, experiment_id: int) -> HttpResponse:
    """The answer to the question in the address."""
    found = visible_experiment(request.user, experiment_id)
    form = ClearanceForm(request.GET) if request.GET else usual_form()
    shown = None
    if not request.GET:
        shown = usual_clearance(found)
    elif form.is_valid():
        try:
            shown = _shown(found, form.cleaned_data)
        except WriteError as error:
            put_refusal(form, error, {"length_s": "length_h"})
    context = {"experiment": found, "clearance": shown, "clearance_form": form}
    return render(request, "screen/clearance.html", context, status=422 if form.errors else 200)


def usual_form() -> ClearanceForm:
    """An unasked question of the usual length, from now."""
    return ClearanceForm(initial={"length_h": f"{USUAL_LENGTH_H:g}"})


def usual_clearance(experiment: Experiment) -> ClearanceView:
    """Could I start now, for the usual length?"""
    return _shown(experiment, {"length_h": USUAL_LENGTH_H, "start": None, "allowed_s": None})


def clearance_context(experiment: Experiment) -> dict[str, Any]:
    """What `runs/_clearance.html` shows on the experiment's page; nothing is asked unasked where there are many limits."""
    is_asked = len(limits_at(experiment, timezone.now())) <= MOST_UNASKED
    return {"clearance_form": usual_form(), "clearance": usual_clearance(experiment) if is_asked else None,
            "clearance_fault": "" if is_asked else "This experiment has many limits: ask by the button."}


def run_clearance_context(run: Run) -> dict[str, Any]:
    """What `runs/_clearance.html` shows on a run's page."""
    now = timezone.now()
    answer = run_clearance(run, now)
    return {"clearance": clearance_view(answer, checklist(_taps(run.experiment), answer.open_causes, now))}


def _shown(experiment: Experiment, typed: dict[str, Any]) -> ClearanceView:
    now = timezone.now()
    question = checked_question(us_of(typed["start"] or now), typed["length_h"] * 3600.0, typed["allowed_s"] or 0.0, us_of(now))
    answer = clearance_of(experiment, question)
    return clearance_view(answer, checklist(_taps(experiment), answer.open_causes, now))


def _taps(experiment: Experiment) -> list[Any]:
    return list(experiment.taps.select_related("station", "heard").order_by("station__name", "name"))
