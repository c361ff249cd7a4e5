"""The invented lab's runs: one is over with a ledger that sums, one lasts, one comes."""

from datetime import UTC, datetime, timedelta

import pytest
from django.utils import timezone

from labmon.demo.benches import BENCHES, bench_named
from labmon.demo.people import PEOPLE
from labmon.demo.runs import RUNS, declare_runs, evening_before
from labmon.experiments.actions import set_limit
from labmon.runs.models import Run, RunLedger
from labmon.runs.queries import RunState, state_of_run
from tests.factories import make_experiment, make_person, make_tap


@pytest.mark.parametrize("hour", range(24))
def test_the_evening_is_a_past_one_whose_next_has_not_come(hour):
    now = datetime(2031, 3, 4, hour, 30, tzinfo=UTC)
    evening = evening_before(now)
    assert evening.hour == 20 and timedelta(hours=4) <= now - evening < timedelta(hours=28)


@pytest.mark.django_db
def test_the_runs_are_declared_once():
    for plan in PEOPLE:
        make_person(plan.role, username=plan.login)
    for bench in {plan.bench for plan in RUNS}:
        tap = make_tap()
        set_limit(make_experiment(tap, name=bench_named(bench).experiment), tap, "er_db", alarm=20.0, by=None,
                  valid_from=timezone.now() - timedelta(days=5))
    for _ in range(2):
        declare_runs(timezone.now(), lambda _: None)
    states = sorted(state_of_run(run, timezone.now()).value for run in Run.objects.all())
    assert len(states) == len(RUNS) and states[0] in (RunState.OVER, RunState.PLANNED) and len(BENCHES) > len(RUNS)
    assert not Run.objects.filter(planned_at__gt=timezone.now()).exists()
    over = [run for run in Run.objects.all() if state_of_run(run, timezone.now()) is RunState.OVER]
    assert [ledger.run for ledger in RunLedger.objects.exclude(made_at=None)] == over and over
    assert all(run.limits_noted_at for run in Run.objects.filter(starts_at__lte=timezone.now()))
