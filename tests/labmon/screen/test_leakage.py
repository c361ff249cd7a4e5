"""The leakage of a splitter, through the page: watched live or named in the past, looked at, entered."""

import time

import numpy as np
import pytest

from labmon.people.models import Role
from tests.factories import make_person, make_station, make_tap, store_readings
from tests.labmon.benches.test_leakages import LATER_US, bench
from tests.labmon.screen.test_pages import queries_of, words

pytestmark = pytest.mark.django_db
TYPED = {"straight": "2031-03-04 12:00:00", "exchanged": "2031-03-04 12:02:00", "seconds": "60", "light_er_db": "40"}


@pytest.fixture
def address(client):
    client.force_login(make_person(Role.MANAGER))
    tap = bench()
    return f"/stations/{tap.station.name}/taps/{tap.name}/leakage/"


@pytest.fixture(autouse=True)
def _later(monkeypatch):
    """The readings lie in 2031: the server's clock stands behind them."""
    monkeypatch.setattr("labmon.benches.exposures.server_now_us", lambda: LATER_US)


def test_it_is_looked_at_then_entered(client, address):
    look = client.post(address, TYPED | {"act": "look"}, follow=True)
    said = words(look)
    assert "of the light meant for port 1 lands in port 2" in said and "0.050 %" not in said
    assert "Left in, it hides every extinction ratio above 27." in said and "Enter this leakage" in said
    typed = dict(look.context["hidden"]) | {"act": "enter"}
    done = client.post(address, typed, follow=True)
    assert "is taken off from the earlier stretch on, with its uncertainty" in words(done)
    assert "0.195" in words(done) and "being made anew" in words(done)


def test_what_the_light_is_worth_must_be_said(client, address):
    answer = client.post(address, {name: value for name, value in TYPED.items() if name != "light_er_db"} | {"act": "look"})
    assert answer.status_code == 422 and "This field is required" in words(answer)
    assert 'value="2031-03-04 12:00:00"' in answer.content.decode()


def test_a_refusal_keeps_what_was_typed(client, address):
    answer = client.post(address, TYPED | {"exchanged": "", "act": "look"})
    assert answer.status_code == 422 and "Two stretches are wanted" in words(answer)
    assert 'value="40"' in answer.content.decode()
    look = client.post(address, TYPED | {"exchanged": "2031-03-04 12:00:50", "act": "look"}, follow=True)
    assert "was not exchanged" in words(look) and "Enter this" not in words(look)


def test_it_is_watched_live_one_after_the_other(client, monkeypatch):
    client.force_login(make_person(Role.MANAGER))
    tap = make_tap(make_station("n2"), "eom-in")
    monkeypatch.setattr("labmon.benches.exposures.server_now_us", lambda: time.time_ns() // 1000)
    address = "/stations/n2/taps/eom-in/leakage/"
    answer = client.post(address, {"seconds": "30", "light_er_db": "40", "act": "watch-first"})
    assert answer.status_code == 302 and "light_er_db=40" in answer["Location"]
    page = client.get(answer["Location"])
    assert "Watching n2/eom-in, light meant for port 1: no reading so far" in words(page) or \
        "Watching n2/eom-in, light meant for port 1: 0 readings so far" in words(page)
    assert "watch it now" not in words(page)
    now_us = time.time_ns() // 1000
    noise = 1e-9 * np.random.default_rng(2).normal(size=40)
    store_readings(tap, now_us + np.arange(40) * 1_000_000, port1=1e-3 + noise, port2=2e-6 + noise[::-1])
    page = client.get(answer["Location"])
    assert "Port 1 reads least and the light stands: watch it now" in words(page)
    second = client.post(address, dict(page.context["hidden"]) | {"act": "watch-second"})
    assert second.status_code == 302 and "exchanged=" in second["Location"]
    assert "Enter this" not in words(client.get(second["Location"]))


@pytest.mark.parametrize(("role", "status"), [(Role.GUEST, 404), (Role.RESEARCHER, 403), (Role.OWNER, 403)])
def test_only_who_may_calibrate(client, address, role, status):
    client.force_login(make_person(role))
    assert client.get(address).status_code == status


def test_queries_do_not_grow_with_readings(client, address):
    query = f"{address}?straight=2031-03-04T12:00:00Z&exchanged=2031-03-04T12:02:00Z&seconds=60&light_er_db=40"
    queries_of(client, query)
    assert queries_of(client, query) <= 16
