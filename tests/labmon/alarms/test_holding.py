"""Shelving and out of service: bounded, with a name and a reason, ended by itself once, and calling whom it must."""

from datetime import timedelta

import pytest
from django.db import IntegrityError, transaction
from django.utils import timezone

from labmon.alarms.actions import acknowledge_alarm
from labmon.alarms.holding import Held, end_due_holds, end_hold, shelve, take_out_of_service, unshelve_alarm
from labmon.alarms.models import AlarmHold
from labmon.audit.models import AuditEntry
from labmon.errors import WriteError
from labmon.people.models import Role
from labmon.tell.models import Message
from tests.factories import NOON, make_experiment, make_person, make_tap, store_alarm

pytestmark = pytest.mark.django_db
HOUR_S = 3600.0


@pytest.fixture
def owner():
    return make_person(Role.OWNER, email="owner@lab.example")


@pytest.fixture
def alarm(owner):
    tap = make_tap()
    experiment = make_experiment(tap, owner=owner)
    return store_alarm(kind="untrusted", tap=tap, experiment=experiment, raised_at=NOON, message="frozen")


def state(alarm):
    alarm.refresh_from_db()
    return alarm.state


def test_shelved_by_whom_why_and_until(alarm, owner):
    hold = shelve(Held.of_alarm(alarm), by=owner, for_s=2 * HOUR_S, reason="new patch cord")
    assert state(alarm) == "shelved" and alarm.shelved_until == hold.until == hold.begun_at + timedelta(hours=2)
    entry = AuditEntry.objects.get()
    assert (entry.person, entry.action, entry.reason) == (owner, "shelve", "new patch cord")
    assert entry.subject == f"tap/{alarm.tap.station.name}/{alarm.tap.name}"
    assert not Message.objects.exists()


@pytest.mark.parametrize("for_s", [0.0, -1.0, 4 * HOUR_S + 1, float("nan"), float("inf")])
def test_never_for_longer_than_four_hours(alarm, owner, for_s):
    with pytest.raises(WriteError, match="for_s"):
        shelve(Held.of_alarm(alarm), by=owner, for_s=for_s, reason="x")


def test_a_nul_in_a_text_is_left_out(alarm, owner):
    """PostgreSQL stores no NUL in text; a form may send one."""
    assert shelve(Held.of_alarm(alarm), by=owner, for_s=HOUR_S, reason="new\0 cord").reason == "new cord"
    assert acknowledge_alarm(alarm.pk, by=owner, note="se\0en").note == "seen"


def test_never_without_a_reason(alarm, owner):
    for begin in (lambda: shelve(Held.of_alarm(alarm), by=owner, for_s=60, reason=" "),
                  lambda: take_out_of_service(Held(alarm.tap), by=owner, reason="")):
        with pytest.raises(WriteError, match="reason"):
            begin()


def test_comes_back_by_itself_once_and_calls(alarm, owner):
    hold = shelve(Held.of_alarm(alarm), by=owner, for_s=HOUR_S, reason="cord")
    assert end_due_holds(hold.until - timedelta(seconds=1)) == [] and state(alarm) == "shelved"
    assert end_due_holds(hold.until) == [hold.pk] and state(alarm) == "unacknowledged"
    assert end_due_holds(hold.until) == [] and end_due_holds(hold.until + timedelta(hours=1)) == []
    assert f"-back-{hold.pk}-to-" in Message.objects.get().key and Message.objects.get().kind == "back"
    last = AuditEntry.objects.order_by("-pk").first()
    assert (last.person, last.person_name, last.action, last.reason) == (None, "labmon", "unshelve", "its time was over")
    assert AuditEntry.objects.count() == 2


def test_an_acknowledged_one_comes_back_acknowledged_and_calls_nobody(alarm, owner):
    acknowledge_alarm(alarm.pk, by=owner)
    hold = shelve(Held.of_alarm(alarm), by=owner, for_s=HOUR_S, reason="cord")
    end_hold(hold.pk, by=owner)
    assert state(alarm) == "acknowledged" and not Message.objects.exists()


def test_unshelved_by_hand_once(alarm, owner):
    shelve(Held.of_alarm(alarm), by=owner, for_s=HOUR_S, reason="cord")
    assert len(unshelve_alarm(alarm, by=owner)) == 1 and unshelve_alarm(alarm, by=owner) == []
    assert state(alarm) == "unacknowledged" and AuditEntry.objects.count() == 2


def test_shelving_again_replaces(alarm, owner):
    first = shelve(Held.of_alarm(alarm), by=owner, for_s=HOUR_S, reason="cord")
    second = shelve(Held.of_alarm(alarm), by=make_person(), for_s=4 * HOUR_S, reason="still at it")
    first.refresh_from_db()
    assert first.ended_at is not None and state(alarm) == "shelved" and alarm.shelved_until == second.until
    assert end_due_holds(first.until) == []


def test_out_of_service_wins_until_it_is_put_back(alarm, owner):
    shelve(Held.of_alarm(alarm), by=owner, for_s=HOUR_S, reason="cord")
    out = take_out_of_service(Held(alarm.tap), by=owner, reason="laser away for repair")
    assert state(alarm) == "out-of-service" and out.until is None
    assert end_due_holds(timezone.now() + timedelta(days=300)) and state(alarm) == "out-of-service"
    end_hold(out.pk, by=owner)
    end_hold(out.pk, by=owner)
    assert state(alarm) == "unacknowledged" and Message.objects.count() == 1
    assert list(AuditEntry.objects.values_list("action", flat=True).order_by("pk")) == [
        "shelve", "take out of service", "unshelve", "put back into service"]  # fmt: skip


def test_another_taps_alarm_is_not_touched(alarm, owner):
    other = store_alarm(kind="untrusted", tap=make_tap(), raised_at=NOON, message="frozen")
    shelve(Held(alarm.tap), by=owner, for_s=HOUR_S, reason="cord")
    assert state(other) == "unacknowledged" and state(alarm) == "shelved"


def test_a_returned_one_stays_as_it_was(alarm, owner):
    alarm.returned_at, alarm.state = NOON, "returned-unacknowledged"
    alarm.save()
    shelve(Held.of_alarm(alarm), by=owner, for_s=HOUR_S, reason="cord")
    assert state(alarm) == "returned-unacknowledged"


@pytest.mark.parametrize(
    ("change", "name"),
    [
        ({"until": NOON + timedelta(hours=4, seconds=1)}, "shelf_ends_within_4_h"),
        ({"until": None}, "shelf_ends_within_4_h"),
        ({"until": NOON}, "hold_ends_after_it_begins"),
        ({"reason": ""}, "hold_has_a_reason"),
        ({"ended_at": NOON - timedelta(seconds=1)}, "hold_ended_after_it_began"),
        ({"alarm_kind": "limit"}, "hold_names_its_limit"),
    ],
)
def test_the_database_refuses_an_impossible_hold(change, name):
    fields = {"kind": "shelved", "tap": make_tap(), "reason": "x", "begun_at": NOON, "until": NOON + timedelta(hours=4)}
    with pytest.raises(IntegrityError, match=name), transaction.atomic():
        AlarmHold.objects.create(**fields | change)


def test_the_database_keeps_one_standing_hold_of_a_kind():
    fields = {"kind": "shelved", "tap": make_tap(), "reason": "x", "begun_at": NOON, "until": NOON + timedelta(hours=4)}
    AlarmHold.objects.create(**fields)
    with pytest.raises(IntegrityError, match="one_standing_hold"), transaction.atomic():
        AlarmHold.objects.create(**fields)
