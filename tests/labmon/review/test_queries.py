from datetime import UTC, datetime, timedelta

import pytest

from labmon.events.models import Event
from labmon.people.models import Role
from labmon.review.queries import week_of_calls
from labmon.tell.models import Message, MessageKind
from tests.factories import make_person, make_station, make_tap, store_alarm

pytestmark = pytest.mark.django_db
MONDAY = datetime(2031, 3, 3, tzinfo=UTC)
NEXT = MONDAY + timedelta(days=7)


def tell(person, at, kind=MessageKind.CALL, event=None):
    made = Message.objects.create(key=f"{person}-{at}-{kind}", kind=kind, person=person, subject="x", body="x", event=event)
    Message.objects.filter(pk=made.pk).update(made_at=at)


def raise_alarm(tap, at, **fields):
    return store_alarm(**{"kind": "untrusted", "tap": tap, "raised_at": at, "returned_at": at + timedelta(minutes=1),
                          "message": "frozen"} | fields)


def test_a_week_holds_what_belongs_to_it():
    tap, ann = make_tap(make_station("n2"), "in"), make_person(Role.OWNER, username="ann")
    drill = Event.objects.create(kind="light", began_at=MONDAY, began_until=MONDAY, is_drill=True)
    inside = raise_alarm(tap, MONDAY)
    for at, fields in ((MONDAY - timedelta(seconds=1), {}), (NEXT, {}), (MONDAY, {"is_late": True}),
                       (MONDAY + timedelta(days=1), {"event": drill})):
        raise_alarm(tap, at, **fields)
    still = raise_alarm(make_tap(tap.station, "air"), MONDAY - timedelta(days=200), returned_at=None)
    for kind in (MessageKind.CALL, MessageKind.REMINDER, MessageKind.NOTICE):
        tell(ann, MONDAY, kind)
    tell(ann, NEXT)
    tell(ann, MONDAY + timedelta(hours=1), event=drill)
    week = week_of_calls(MONDAY, NEXT)
    assert [one.raised_at for one in week.alarms] == [inside.raised_at] and not week.is_cut
    assert still.raised_at in [one.raised_at for one in week.older]
    assert [call.is_reminder for call in week.calls] == [False, True] and week.people == {ann.pk: "ann"}
    assert set(week.sources.values()) == {"n2/in, untrusted", "n2/air, untrusted"}


def test_cost_is_of_the_week(django_assert_num_queries):
    ann = make_person(Role.OWNER)
    for number in range(30):
        raise_alarm(make_tap(), MONDAY + timedelta(hours=number))
        tell(ann, MONDAY + timedelta(hours=number))
    with django_assert_num_queries(4):
        assert len(week_of_calls(MONDAY, NEXT).alarms) == 30
