import pytest

from labmon.alarms.actions import acknowledge_alarm
from labmon.alarms.models import Alarm, AlarmState
from labmon.audit.models import AuditEntry
from labmon.people.models import Role
from tests.factories import NOON, make_experiment, make_person, make_tap

pytestmark = pytest.mark.django_db


def make_alarm(**fields):
    tap = make_tap()
    return Alarm.objects.create(
        **{"kind": "untrusted", "tap": tap, "experiment": make_experiment(tap), "raised_at": NOON, "message": "frozen"} | fields
    )


def test_acknowledged_once_by_the_first():
    first, second, alarm = make_person(Role.RESEARCHER), make_person(), make_alarm()
    acknowledge_alarm(alarm.pk, by=first, note="on my way")
    taken = acknowledge_alarm(alarm.pk, by=second, note="me too")
    assert (taken.state, taken.acknowledged_by, taken.note) == (AlarmState.ACKNOWLEDGED, first, "on my way")
    entry = AuditEntry.objects.get()
    assert (entry.person, entry.action, entry.before, entry.after) == (
        first,
        "acknowledge alarm",
        {"state": "unacknowledged"},
        {"state": "acknowledged"},
    )


def test_acknowledging_a_returned_alarm_makes_it_normal():
    alarm = make_alarm(returned_at=NOON, state=AlarmState.RETURNED_UNACKNOWLEDGED)
    assert acknowledge_alarm(alarm.pk, by=make_person()).state == AlarmState.NORMAL


def test_unknown_alarm():
    with pytest.raises(Alarm.DoesNotExist):
        acknowledge_alarm(0, by=make_person())


def test_browsers_are_told_after_the_commit(django_capture_on_commit_callbacks, monkeypatch):
    told = []
    monkeypatch.setattr("labmon.live.publish._send", told.append)
    with django_capture_on_commit_callbacks(execute=True):
        alarm = make_alarm()
        acknowledge_alarm(alarm.pk, by=make_person())
        assert told == []
    assert told == [{"kind": "alarm", "ids": [alarm.pk]}]
