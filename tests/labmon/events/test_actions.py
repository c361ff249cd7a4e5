"""The rota, quiet hours, and the rules of calling."""

from datetime import timedelta

import pytest
from django.utils import timezone

from labmon.audit.models import AuditEntry
from labmon.errors import WriteError
from labmon.events.actions import put_on_call, set_call_rules, set_quiet_hours, take_off_call
from labmon.events.models import CallRules, OnCall
from labmon.events.queries import on_call_between
from labmon.people.models import Role
from labmon.tell.models import QuietHours
from tests.factories import NOON, make_person

pytestmark = pytest.mark.django_db
HOUR = timedelta(hours=1)


@pytest.fixture
def chief():
    return make_person(username="maren")


def test_it_is_always_clear_who_is_on_call(chief):
    joren = make_person(Role.RESEARCHER, username="joren")
    put_on_call(joren, NOON, NOON + 8 * HOUR, by=chief)
    put_on_call(chief, NOON + 8 * HOUR, NOON + 16 * HOUR, by=chief)
    with pytest.raises(WriteError) as fault:
        put_on_call(chief, NOON + 7 * HOUR, NOON + 9 * HOUR, by=chief)
    assert "joren is on call from 2031-03-04 12:00 to 2031-03-04 20:00 UTC" in fault.value.why
    assert [one.person.username for one in on_call_between(NOON, NOON + 24 * HOUR)] == ["joren", "maren"]
    assert AuditEntry.objects.filter(action="put on call").count() == 2


@pytest.mark.parametrize(("hours", "field"), [(0, "until_at"), (-1, "until_at"), (24 * 32, "until_at")])
def test_no_time_is_refused(chief, hours, field):
    with pytest.raises(WriteError) as fault:
        put_on_call(chief, NOON, NOON + hours * HOUR, by=chief)
    assert fault.value.field == field and not OnCall.objects.exists()


def test_who_left_is_not_put_on_call(chief):
    with pytest.raises(WriteError):
        put_on_call(make_person(Role.RESEARCHER, is_active=False), NOON, NOON + HOUR, by=chief)


def test_a_time_that_has_begun_ends_now_one_to_come_never_was(chief):
    now = timezone.now()
    begun = put_on_call(chief, now - HOUR, now + HOUR, by=chief)
    to_come = put_on_call(chief, now + 2 * HOUR, now + 3 * HOUR, by=chief)
    for row in (begun, begun, to_come, to_come):
        take_off_call(row.pk, by=chief)
    begun.refresh_from_db()
    assert begun.until_at <= timezone.now() and OnCall.objects.count() == 1
    assert AuditEntry.objects.filter(action="take off call").count() == 2


def test_quiet_hours_are_set_changed_and_lifted(chief):
    set_quiet_hours(chief, (1320, 420), "Europe/Berlin", by=chief)
    assert QuietHours.objects.get().zone == "Europe/Berlin"
    set_quiet_hours(chief, None, by=chief)
    assert not QuietHours.objects.exists()
    for span, zone in (((60, 60), "UTC"), ((0, 1440), "UTC"), ((0, 60), "Nowhere/Atall"), ((0, 60), "../etc/passwd")):
        with pytest.raises(WriteError):
            set_quiet_hours(chief, span, zone, by=chief)


@pytest.mark.parametrize("wish", [
    {"remind_after_s": 59.0}, {"remind_after_s": 1e6}, {"remind_after_s": float("nan")}, {"drill_weekday": 7},
    {"drill_hour": 24}])
def test_rules_out_of_range_are_refused(chief, wish):
    with pytest.raises(WriteError):
        set_call_rules(**({"remind_after_s": 900.0, "drill_weekday": None, "drill_hour": 10} | wish), by=chief)
    assert not CallRules.objects.exists()
