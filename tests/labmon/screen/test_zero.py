"""Taking a zero on the page: the caution, the confirmation, the watching, the proposal."""

import time
from datetime import timedelta

import numpy as np
import pytest
from django.utils import timezone

from labmon.people.models import Role
from tests.factories import make_person, make_station, make_tap, store_readings
from tests.labmon.screen.test_pages import queries_of, words

pytestmark = pytest.mark.django_db
SECOND_US = 1_000_000


@pytest.fixture
def tap():
    """Twenty minutes up to now; dark for a minute that ended five minutes ago."""
    made = make_tap(make_station("n2", owner=make_person(Role.OWNER, username="asha")), "eom-in")
    rng = np.random.default_rng(3)
    port1, port2 = 1e-3 * (1 + 1e-3 * rng.normal(size=1200)), 1.3e-6 + 1e-9 * rng.normal(size=1200)
    port1[840:900], port2[840:900] = 2e-7 + 1e-9 * rng.normal(size=60), 3e-7 + 1e-9 * rng.normal(size=60)
    store_readings(made, time.time_ns() // 1000 - np.arange(1200)[::-1] * SECOND_US, port1=port1, port2=port2)
    return made


ADDRESS = "/stations/n2/taps/eom-in/zero/"


def test_it_begins_with_the_caution_and_only_with_the_beam_blocked(client, tap):
    client.force_login(make_person(Role.MANAGER))
    assert "never look into a fibre" in words(client.get(ADDRESS))
    answer = client.post(ADDRESS, {"seconds": "30"}, follow=True)
    assert "The beam is not said to be blocked" in words(answer)
    answer = client.post(ADDRESS, {"seconds": "30", "is_blocked": "on"})
    assert answer.status_code == 302 and "seconds=30" in answer["Location"]
    page = client.get(answer["Location"])
    assert "Watching n2/eom-in in the dark" in words(page)
    assert "Enter this zero" not in words(page)


def test_a_dark_stretch_of_the_past_is_offered_looked_at_and_entered(client, tap):
    client.force_login(make_person(Role.MANAGER))
    page = client.get(ADDRESS)
    assert "1 dark stretch of the last week" in words(page)
    query = page.context["offers"][0][2]
    look = client.get(f"{ADDRESS}?{query}")
    assert "A sound zero of n2/eom-in: both ports steady and dark over" in words(look)
    typed = {"from": look.context["from"], "seconds": look.context["seconds"]}
    assert client.post(ADDRESS, typed).status_code == 422
    assert not tap.calibrations.exists()
    done = client.post(ADDRESS, typed | {"is_blocked": "on"}, follow=True)
    said = words(done)
    assert tap.calibrations.get().zero2 == pytest.approx(3e-7, abs=1e-9)
    assert "honestly claim now is" in said and "being made anew" in said
    assert "honestly claim" in words(client.get("/stations/n2/"))


def test_light_is_refused_in_words(client, tap):
    client.force_login(make_person(Role.MANAGER))
    from_at = (timezone.now() - timedelta(seconds=120)).isoformat().replace("+00:00", "Z")
    said = words(client.get(ADDRESS, {"from": from_at, "seconds": "60"}))
    assert "No zero of n2/eom-in from this: port 1 is not dark" in said
    assert "still shows 1e+02 % of the usual light" in said or "still shows 100 % of the usual light" in said


@pytest.mark.parametrize("query", [{"from": "noon", "seconds": "30"}, {"from": "2031-03-04T02:00:00Z", "seconds": "x"},
                                   {"from": "2031-03-04T02:00:00Z", "seconds": "nan"}])
def test_a_mistyped_stretch_leads_back_with_a_word(client, tap, query):
    client.force_login(make_person(Role.MANAGER))
    answer = client.get(ADDRESS, query)
    assert answer.status_code == 302
    assert "Not done." in words(client.get(answer["Location"]))


@pytest.mark.parametrize(("role", "status"), [(Role.GUEST, 404), (Role.RESEARCHER, 403), (Role.OWNER, 403)])
def test_only_who_may_calibrate(client, tap, role, status):
    client.force_login(make_person(role))
    assert client.get(ADDRESS).status_code == status


def test_queries_do_not_grow_with_readings(client, tap):
    client.force_login(make_person(Role.MANAGER))
    queries_of(client, ADDRESS)
    assert queries_of(client, ADDRESS) <= 8
    assert queries_of(client, "/stations/n2/taps/eom-in/calibration/") <= 10
