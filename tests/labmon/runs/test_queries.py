"""Which runs there are: half-open spans, stopped and cancelled ones, guests."""

from datetime import timedelta

import pytest

from labmon.people.models import Role
from labmon.runs.queries import run_now, runs_between, runs_now, runs_visible_to
from tests.factories import NOON, make_experiment, make_person, make_run, make_tap

pytestmark = pytest.mark.django_db
HOUR = timedelta(hours=1)


def test_a_run_lasts_from_its_start_up_to_its_end():
    experiment = make_experiment(make_tap())
    run = make_run(experiment)
    assert run_now(experiment, NOON) == run
    assert run_now(experiment, NOON - timedelta(seconds=1)) is None
    assert run_now(experiment, NOON + HOUR) is None


def test_stopped_runs_end_when_stopped_and_cancelled_ones_never_were():
    stopped, cancelled = make_experiment(make_tap()), make_experiment(make_tap())
    make_run(stopped, ended_at=NOON + HOUR / 2)
    make_run(cancelled, cancelled_at=NOON)
    assert run_now(stopped, NOON + HOUR / 4) and not run_now(stopped, NOON + HOUR / 2)
    assert run_now(cancelled, NOON) is None
    assert runs_between(NOON + HOUR / 2, NOON + HOUR) == []


def test_runs_of_many_experiments_take_one_query(django_assert_num_queries):
    experiments = [make_experiment(make_tap()) for _ in range(5)]
    runs = [make_run(one) for one in experiments[:4]]
    with django_assert_num_queries(1):
        found = runs_now([one.pk for one in experiments], NOON)
    assert found == {run.experiment_id: run for run in runs}


def test_runs_between_overlap_the_span_and_come_by_start(django_assert_num_queries):
    one, other = make_experiment(make_tap()), make_experiment(make_tap())
    early, late = make_run(one), make_run(one, NOON + 2 * HOUR)
    beside = make_run(other, NOON + HOUR)
    with django_assert_num_queries(1):
        assert runs_between(NOON, NOON + 3 * HOUR) == [early, beside, late]
    assert runs_between(NOON + HOUR, NOON + 2 * HOUR) == [beside]
    assert runs_between(NOON, NOON + 3 * HOUR, [one]) == [early, late]


def test_guests_see_the_runs_of_what_is_named_for_them():
    guest, tap = make_person(Role.GUEST), make_tap()
    guest.guest_stations.add(tap.station)
    named = make_run(make_experiment(tap))
    make_run(make_experiment(make_tap()))
    assert list(runs_visible_to(guest)) == [named]
