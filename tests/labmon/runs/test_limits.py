"""Which limits rule in a run: those of its start instant, then each as it was set; nothing is put into its past."""

from datetime import timedelta

import pytest

from labmon.errors import WriteError
from labmon.experiments.actions import retire_limit, set_limit
from labmon.runs.limits import note_start_limits, ruling_limits
from labmon.runs.models import RunLimit
from tests.factories import NOON, make_experiment, make_run, make_tap

pytestmark = pytest.mark.django_db
MINUTE = timedelta(minutes=1)


@pytest.fixture
def clock(monkeypatch):
    """A clock that tests set; it begins at noon."""
    now = {"at": NOON}
    monkeypatch.setattr("django.utils.timezone.now", lambda: now["at"])
    return lambda at: now.update(at=at)


@pytest.fixture
def bench():
    tap = make_tap()
    return tap, make_experiment(tap)


def ruled(run):
    """(alarm, from, until) in minutes of the run."""
    return [
        (one.version.alarm, (one.from_at - run.starts_at) / MINUTE, (one.until_at - run.starts_at) / MINUTE)
        for one in ruling_limits(run)
    ]


def test_the_start_copies_what_was_in_force_then_however_late_it_is_noticed(clock, bench):
    tap, experiment = bench
    set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    run = make_run(experiment, NOON + 10 * MINUTE)
    clock(NOON + 5 * MINUTE)
    set_limit(experiment, tap, "er_db", alarm=22.0, by=None)
    clock(NOON + 30 * MINUTE)
    set_limit(experiment, tap, "er_db", alarm=17.0, by=None)
    clock(NOON + 40 * MINUTE)
    note_start_limits(run, NOON + 40 * MINUTE)
    assert ruled(run) == [(22.0, 0, 20), (17.0, 20, 60)]
    assert note_start_limits(run, NOON + 50 * MINUTE) == [] and RunLimit.objects.count() == 2


def test_a_limit_retired_in_the_run_rules_up_to_then(clock, bench):
    tap, experiment = bench
    limit = set_limit(experiment, tap, "er_db", alarm=20.0, by=None).limit
    run = make_run(experiment, NOON)
    clock(NOON + 15 * MINUTE)
    note_start_limits(run, NOON)
    retire_limit(limit, by=None)
    assert ruled(run) == [(20.0, 0, 15)]


def test_the_first_limit_of_a_tap_set_in_the_run_does_not_look_back_into_it(clock, bench):
    tap, experiment = bench
    run = make_run(experiment, NOON)
    clock(NOON + 20 * MINUTE)
    version = set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    assert version.valid_from < run.starts_at
    note_start_limits(run, NOON + 21 * MINUTE)
    assert ruled(run) == [(20.0, 20, 60)]


def test_no_limit_can_be_put_into_the_past_of_a_run(clock, bench):
    tap, experiment = bench
    set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    make_run(experiment, NOON, name="Rb scan")
    clock(NOON + 120 * MINUTE)
    with pytest.raises(WriteError, match="“Rb scan” was under way then"):
        set_limit(experiment, tap, "er_db", alarm=17.0, by=None, valid_from=NOON + 30 * MINUTE)
    assert set_limit(experiment, tap, "er_db", alarm=17.0, by=None, valid_from=NOON + 60 * MINUTE)


def test_a_limit_set_after_the_run_is_not_its_limit(clock, bench):
    tap, experiment = bench
    run = make_run(experiment, NOON)
    note_start_limits(run, NOON)
    clock(NOON + 90 * MINUTE)
    set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    assert ruled(run) == []


def test_before_the_start_the_limits_of_now_are_shown(clock, bench):
    tap, experiment = bench
    other = make_tap()
    experiment.taps.add(other)
    set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    set_limit(experiment, other, "er_db", alarm=25.0, by=None)
    run = make_run(experiment, NOON + 60 * MINUTE)
    run.taps.set([tap])
    assert ruled(run) == [(20.0, 0, 60)] and not RunLimit.objects.exists()


def test_it_takes_the_same_queries_however_many_limits(clock, django_assert_num_queries):
    taps = [make_tap() for _ in range(12)]
    experiment = make_experiment(*taps)
    for tap in taps:
        set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    run = make_run(experiment, NOON)
    note_start_limits(run, NOON)
    with django_assert_num_queries(1):
        assert len(ruling_limits(run)) == 12
