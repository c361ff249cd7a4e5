"""A run's start: limits copied, suppressed alarms heard and called once, earlier acknowledgements no longer count."""

from datetime import timedelta

import pytest

from labmon.alarms.models import Alarm, AlarmState
from labmon.experiments.actions import set_limit
from labmon.people.models import Role
from labmon.runs.models import Run
from labmon.runs.starting import start_due_runs
from labmon.tell.models import Message
from tests.factories import NOON, make_experiment, make_person, make_run, make_tap, store_alarm

pytestmark = pytest.mark.django_db
MINUTE = timedelta(minutes=1)


@pytest.fixture(autouse=True)
def clock(monkeypatch):
    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON)


@pytest.fixture
def experiment():
    return make_experiment(make_tap(), owner=make_person(Role.OWNER, email="owner@lab.example"))


def open_alarm(experiment, *, in_runs_only=True, **facts):
    tap = experiment.taps.get()
    version = set_limit(experiment, tap, "er_db", alarm=20.0, in_runs_only=in_runs_only, by=None)
    row = {"kind": "limit", "experiment": experiment, "limit": version.limit, "version": version, "tap": tap, "quantity": "er_db"}
    return store_alarm(**row, raised_at=NOON - MINUTE, message="b/t: low", **facts)


def test_only_runs_whose_time_has_come_start_and_each_once(experiment):
    due, later = make_run(experiment, NOON - MINUTE), make_run(experiment, NOON + 60 * MINUTE)
    gone = make_run(make_experiment(make_tap()), NOON - MINUTE, cancelled_at=NOON)
    assert start_due_runs() == [due.pk] and start_due_runs() == []
    assert list(Run.objects.exclude(limits_noted_at=None)) == [due]
    assert start_due_runs(NOON + 61 * MINUTE) == [later.pk]
    assert Run.objects.get(pk=gone.pk).limits_noted_at is None


def test_a_suppressed_alarm_is_heard_and_calls_the_runs_people_once(experiment):
    alarm = open_alarm(experiment, is_suppressed=True)
    night = make_person(Role.RESEARCHER, email="night@lab.example")
    run = make_run(experiment, NOON - MINUTE, owner=night)
    start_due_runs()
    start_due_runs()
    alarm.refresh_from_db()
    assert alarm.state == AlarmState.UNACKNOWLEDGED
    mail = Message.objects.get()
    assert f"-run-{run.pk}-to-" in mail.key and mail.recipients == ["night@lab.example"], "the run's owner first"


def test_an_acknowledgement_of_an_earlier_run_does_not_count_for_this_one(experiment):
    alarm = open_alarm(experiment, acknowledged_at=NOON - MINUTE, acknowledged_by=make_person())
    make_run(experiment, NOON)
    start_due_runs()
    alarm.refresh_from_db()
    assert (alarm.state, alarm.acknowledged_by) == (AlarmState.UNACKNOWLEDGED, None)


def test_an_alarm_of_a_limit_that_always_calls_is_left_alone(experiment):
    alarm = open_alarm(experiment, in_runs_only=False, acknowledged_at=NOON - MINUTE)
    make_run(experiment, NOON)
    start_due_runs()
    assert Alarm.objects.get(pk=alarm.pk).state == AlarmState.ACKNOWLEDGED and not Message.objects.exists()


def test_a_shelved_alarm_is_told_of_by_its_shelf_not_by_the_run(experiment):
    alarm = open_alarm(experiment, is_suppressed=True, shelved_until=NOON + 60 * MINUTE)
    make_run(experiment, NOON)
    start_due_runs()
    assert Alarm.objects.get(pk=alarm.pk).state == AlarmState.SHELVED and not Message.objects.exists()


def test_a_run_declared_when_it_was_over_wakes_nobody(experiment):
    alarm = open_alarm(experiment, is_suppressed=True)
    make_run(experiment, NOON - 120 * MINUTE)
    start_due_runs()
    assert Alarm.objects.get(pk=alarm.pk).state == AlarmState.SUPPRESSED
