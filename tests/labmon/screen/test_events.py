"""An event's page and the page of calls: the same number of queries for many as for few; who sees what."""

from datetime import timedelta

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext
from django.utils import timezone

from labmon.events.models import Event, OnCall
from labmon.events.telling import tell_due
from labmon.people.models import Role
from labmon.tell.models import QuietHours
from tests.factories import make_person
from tests.labmon.events.lab import call, make_alarm, make_bench

pytestmark = pytest.mark.django_db


@pytest.fixture
def owner():
    return make_person(Role.OWNER, username="asha", email="asha@lab.example")


def queries_of(client, address):
    with CaptureQueriesContext(connection) as queries:
        assert client.get(address).status_code == 200
    return len(queries)


def test_twenty_or_two_hundred_alarms_cost_the_same(client, owner):
    client.force_login(owner)
    counts = []
    for count, network in ((20, "m"), (200, "n")):
        people = [make_person(Role.OWNER, email=f"{network}{one}@lab.example") for one in range(count // 5)]
        taps = [make_bench(f"{network}{one}", people[one % len(people)], network=network) for one in range(count)]
        call(*(make_alarm(tap) for tap in taps))
        tell_due(timezone.now() + timedelta(minutes=1))
        counts.append(queries_of(client, f"/events/{Event.objects.latest('pk').pk}/"))
    assert counts[0] == counts[1]


def test_many_times_on_call_cost_the_same(client):
    client.force_login(make_person())
    queries_of(client, "/calls/")  # makes the key that signs webhooks
    counts, now = [], timezone.now()
    for count in (2, 40):
        for one in range(count):
            begin = now + timedelta(hours=6 * one + (1000 if count == 40 else 0))
            OnCall.objects.create(person=make_person(), from_at=begin, until_at=begin + timedelta(hours=6))
        counts.append(queries_of(client, "/calls/"))
    assert counts[0] == counts[1]


def test_a_guest_sees_of_an_event_the_benches_named_for_them_and_nobodys_address(client, owner):
    taps = [make_bench(f"b{one}", owner, network="n") for one in range(3)]
    call(*(make_alarm(tap) for tap in taps))
    tell_due(timezone.now() + timedelta(minutes=1))
    guest = make_person(Role.GUEST)
    guest.guest_stations.add(taps[0].station)
    client.force_login(guest)
    said = client.get(f"/events/{Event.objects.get().pk}/").content.decode()
    assert "b0/out" in said and "b1/out" not in said and "asha" not in said
    assert client.get("/calls/").status_code == 403


def test_taking_twice_says_so(client, owner):
    call(make_alarm(make_bench("b1", owner)))
    client.force_login(owner)
    address = f"/events/{Event.objects.get().pk}/take/"
    assert "You have it: 1 alarm acknowledged" in client.post(address, follow=True).content.decode()
    assert "Somebody was faster" in client.post(address, follow=True).content.decode()


def test_quiet_hours_are_typed_as_times_and_faults_keep_what_was_typed(client, owner):
    client.force_login(owner)
    assert client.post("/you/telling/", {"from_minute": "22:00", "until_minute": "7.30", "zone": ""}).status_code == 302
    hours = QuietHours.objects.get()
    assert (hours.from_minute, hours.until_minute, hours.zone) == (1320, 450, "UTC")
    answer = client.post("/you/telling/", {"from_minute": "late", "until_minute": "07:00", "zone": ""})
    assert answer.status_code == 422 and "late" in answer.content.decode() and "no time of day" in answer.content.decode()
    assert client.post("/you/telling/", {"from_minute": "", "until_minute": "", "zone": ""}).status_code == 302
    assert not QuietHours.objects.exists()


def test_the_service_worker_comes_from_our_root_under_the_policy(client):
    answer = client.get("/notify-worker.js")
    assert answer["Content-Type"] == "text/javascript" and "worker-src 'self'" in answer["Content-Security-Policy"]
    assert "showNotification" in answer.content.decode()
