"""The morning's mail: to whoever wants it, once a night, of what they may see."""

from datetime import UTC, datetime, timedelta

import numpy as np
import pytest
from django.test import Client

from labmon.overnight.actions import set_digest
from labmon.overnight.digest import AFTER, NEWS_FOR, send_digests
from labmon.people.models import Role
from labmon.tell.models import Delivery, Message
from tests.factories import make_person
from tests.labmon.overnight.test_page import HOURS, bench, roll_up

pytestmark = pytest.mark.django_db
MORNING = datetime(2031, 3, 5, 8, tzinfo=UTC)      # the lab's zone is UTC in tests
SOON = MORNING + AFTER


@pytest.fixture
def night():
    low = np.full(HOURS, 25.0)
    low[5] = 18.0
    taps = [bench("bench-a", np.full(HOURS, 27.0)), bench("bench-b", low)]
    roll_up()
    return taps


def wisher(role=Role.RESEARCHER, **more):
    person = make_person(role, **more)
    set_digest(person, is_wanted=True, by=person)
    return person


def test_it_says_what_the_page_says_worst_first_and_once(night):
    person, _ = wisher(email="early@lab.example"), make_person(Role.RESEARCHER, email="late@lab.example")
    assert send_digests(SOON) == 1
    mail = Message.objects.get()
    assert mail.person == person and mail.recipients == ["early@lab.example"]
    assert mail.subject == "1 of 2 benches fell below its limit in the night to 5 March 2031: bench-b/in."
    lines = mail.body.splitlines()
    assert lines[0] == mail.subject and lines[2] == "From 18:00 to 08:00, UTC."
    assert lines[4].startswith("bench-b/in: below limit, worst margin −2.0\N{NO-BREAK SPACE}dB about 23:")
    assert lines[5].startswith("bench-a/in: worst margin +7.0")
    assert lines[-2].endswith("/overnight/?date=2031-03-04")
    assert send_digests(SOON) == send_digests(SOON + timedelta(hours=1)) == 0
    assert Delivery.objects.count() == 1


@pytest.mark.parametrize("now", [MORNING, SOON - timedelta(seconds=1), MORNING + NEWS_FOR + timedelta(seconds=1),
                                 MORNING + timedelta(hours=13)])
def test_only_the_morning_is_its_time(night, now):
    wisher(email="early@lab.example")
    assert send_digests(now) == 0


def test_a_guest_is_told_of_named_benches_only(night):
    guest = wisher(Role.GUEST, email="guest@lab.example")
    guest.guest_stations.add(night[0].station)
    assert send_digests(SOON) == 1
    assert "bench-a/in" in Message.objects.get().body and "bench-b" not in Message.objects.get().body


def test_an_account_that_ended_gets_none(night):
    person = wisher(email="gone@lab.example")
    person.is_active = False
    person.save()
    assert send_digests(SOON) == 0


def test_many_wishes_read_the_night_once(night, django_assert_max_num_queries):
    for number in range(12):
        wisher(email=f"reader-{number}@lab.example")
    with django_assert_max_num_queries(20):
        assert send_digests(SOON) == 12


def test_asked_for_and_ended_on_the_page(night):
    person, client = make_person(Role.RESEARCHER, email="early@lab.example"), Client()
    client.force_login(person)
    assert "You do not get it." in client.get("/you/telling/").content.decode()
    for wanted, said in (("yes", "You get it."), ("yes", "You get it."), ("no", "You do not get it.")):
        answer = client.post("/you/telling/digest/", {"wanted": wanted}, follow=True)
        assert said in answer.content.decode()
        Message.objects.all().delete()
        assert send_digests(SOON) == (1 if wanted == "yes" else 0)
