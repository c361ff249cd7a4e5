"""Who gets the mail."""

import pytest

from labmon.alarms.calls import RAISED, ROSE, call_people
from labmon.alarms.models import Alarm
from labmon.people.models import Role
from labmon.tell.models import Message
from tests.factories import NOON, make_experiment, make_person, make_tap

pytestmark = pytest.mark.django_db


def make_alarm(owner):
    tap = make_tap()
    return Alarm.objects.create(
        kind="limit", tap=tap, experiment=make_experiment(tap, owner=owner), quantity="er_db", raised_at=NOON, message="b/t: low"
    )


def recipients_for(owner):
    alarm = make_alarm(owner)
    call_people([(alarm, RAISED)])
    return sorted(address for message in Message.objects.all() for address in message.recipients)


def test_owner_first():
    make_person(email="chief@lab.example")
    assert recipients_for(make_person(Role.OWNER, email="owner@lab.example")) == ["owner@lab.example"]


@pytest.mark.parametrize("owner", [None, {"email": ""}, {"email": "gone@lab.example", "is_active": False}])
def test_managers_where_the_owner_cannot_be_reached(owner):
    make_person(email="chief@lab.example")
    make_person(email="former@lab.example", is_active=False)
    make_person(Role.RESEARCHER, email="other@lab.example")
    assert recipients_for(owner if owner is None else make_person(Role.OWNER, **owner)) == ["chief@lab.example"]


def test_raised_and_rose_are_two_events_and_each_is_told_once(settings):
    settings.PUBLIC_URL = "https://lab.example"
    alarm = make_alarm(make_person(Role.OWNER, email="owner@lab.example"))
    alarm.level = "warning"
    alarm.save()
    for _ in range(2):
        call_people([(alarm, RAISED)])
    alarm.level = "alarm"
    alarm.save()
    for _ in range(2):
        call_people([(alarm, ROSE)])
    mails, event = Message.objects.order_by("pk"), alarm.event_id
    assert [mail.key.rsplit("-", 2)[0] for mail in mails] == [f"event-{event}-warning", f"event-{event}-alarm"]
    assert f"https://lab.example/stations/{alarm.tap.station.name}/" in mails[0].body
    assert "2031-03-04 12:00:00 UTC" in mails[0].body
