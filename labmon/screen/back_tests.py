"""Back-tests: of the lab, of an experiment, and asking for one."""

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.urls import reverse
from django.views.decorators.http import require_POST, require_safe

from analysis.outlook.backtest import summed_up
from labmon.clearance.back_tests import ask_for_back_test
from labmon.clearance.queries import Progress, kept_back_tests, newest_pass, progress_now
from labmon.clearance.told import back_test_facts, nights_of
from labmon.people.models import Role
from labmon.people.rights import Action, may, role_of
from labmon.pipeline.clearing import hint_back_test
from labmon.screen.back_test_view import back_test_view, wrong_rows
from labmon.screen.door import for_people
from labmon.screen.named import visible_experiment
from labmon.screen.present import count_text, time_text


@require_safe
@for_people
def back_test_page(request: HttpRequest) -> HttpResponse:
    """The lab's back-test: the sum of the last pass, a line a bench, every wrong clearance."""
    is_whole = role_of(request.user) is not Role.GUEST
    rows = kept_back_tests(request.user)
    last = newest_pass()
    if is_whole:
        facts = last.facts if last else None
    else:  # a guest sees the sum of what they may see, and no more
        facts = back_test_facts(summed_up([night for row in rows for night in nights_of(row.nights)])) if rows else None
    wrong, left_out = wrong_rows([(row.bench, _address(row.experiment_id), row.facts) for row in rows])
    return render(request, "screen/back_test.html", {
        "view": back_test_view(facts, "this lab" if is_whole else "your benches") if facts else None,
        "benches": [(row, back_test_view(row.facts, row.bench)) for row in rows], "wrong": wrong, "left_out": left_out,
        "made": time_text(last.ended_at) if last else "", "progress": _progress_words(progress_now()),
        "may_ask": may(request.user, Action.PLAN_RUN)})


@require_safe
@for_people
def experiment_back_test_page(request: HttpRequest, experiment_id: int) -> HttpResponse:
    """An experiment's back-tests, a part a limit."""
    found = visible_experiment(request.user, experiment_id)
    rows = kept_back_tests(request.user, experiment=found, with_nights=False)
    wrong, left_out = wrong_rows([(row.tap_name, _address(found.pk), row.facts) for row in rows])
    return render(request, "screen/back_test_experiment.html", {
        "experiment": found, "limits": [(row, back_test_view(row.facts, row.tap_name), time_text(row.made_at)) for row in rows],
        "wrong": wrong, "left_out": left_out})


@require_POST
@for_people
def ask_for_back_test_page(request: HttpRequest) -> HttpResponse:
    """Begin a pass, or join the one that is under way."""
    begun = ask_for_back_test(by=request.user)
    hint_back_test()
    messages.success(request, f"A back-test of {count_text(begun.total, 'limit')} is under way; this page follows it.")
    return redirect("back-test")


def _address(experiment_id: int) -> str:
    return reverse("experiment-back-test", args=[experiment_id])


def _progress_words(progress: Progress | None) -> str:
    return "" if progress is None else f"A back-test is under way: {progress.done} of {count_text(progress.total, 'limit')} done."
