"""Who may call: keys, sessions, the CSRF token of a session's writes."""

from datetime import timedelta

import pytest
from django.test import Client
from django.utils import timezone

from labmon.people.actions import end_access, set_guest
from labmon.people.keys import make_person_key, revoke_person_key
from labmon.people.models import PersonKey
from tests.labmon.api.conftest import Caller

STATIONS = "/api/v1/stations"
EXPERIMENTS = "/api/v1/experiments"
WISH = {"name": "night run", "taps": ["bench-a/in"]}


def test_without_key_or_session_it_is_401_with_a_challenge(lab):
    answer = lab.nobody.get(STATIONS)
    assert answer.status_code == 401 and answer.headers["WWW-Authenticate"] == "Bearer"
    assert "Authorization: Bearer" in answer.json()["detail"]


@pytest.mark.parametrize("header", ["Bearer wrong", "Bearer ", "Bearer", "Basic bWU6bWU=", "bearer \x00", "x"])
def test_an_unusable_header_is_401_even_with_a_session(lab, header):
    client = Client()
    client.force_login(lab.people["manager"])
    assert client.get(STATIONS, headers={"authorization": header}).status_code == 401


def test_a_key_works_until_it_is_revoked(lab):
    assert lab.guest.get(STATIONS).status_code == 200
    revoke_person_key(PersonKey.objects.get(person=lab.people["guest"]).pk, by=None)
    assert lab.guest.get(STATIONS).status_code == 401


def test_an_expired_key_and_an_ended_person_are_401(lab):
    person = lab.people["researcher"]
    _row, key = make_person_key(person, by=None, expires_at=timezone.now() - timedelta(seconds=1))
    assert Caller(key).get(STATIONS).status_code == 401
    end_access(person, by=None)
    assert lab.researcher.get(STATIONS).status_code == 401


def test_a_guest_is_out_after_the_date_by_key_and_by_session(lab):
    guest = lab.people["guest"]
    client = Client()
    client.force_login(guest)
    assert client.get(STATIONS).status_code == 200
    set_guest(guest, guest.guest_stations.all(), timezone.now() - timedelta(seconds=1), by=None)
    assert lab.guest.get(STATIONS).status_code == client.get(STATIONS).status_code == 401


def test_a_session_reads_and_writes_with_its_csrf_token_only(lab):
    client = Client(enforce_csrf_checks=True)
    client.force_login(lab.people["manager"])
    caller = Caller(client=client)
    assert caller.get(STATIONS).status_code == 200
    refused = caller.post(EXPERIMENTS, WISH)
    assert refused.status_code == 403 and "X-CSRFToken" in refused.json()["detail"]
    client.cookies["csrftoken"] = token = "a" * 32
    made = client.post(EXPERIMENTS, WISH, content_type="application/json", headers={"x-csrftoken": token})
    assert made.status_code == 201


def test_a_key_writes_without_csrf_token(lab):
    assert lab.owner.post(EXPERIMENTS, WISH).status_code == 201


def test_a_wrong_method_is_405_and_says_which_there_are(lab):
    answer = lab.manager.post(STATIONS, {})
    assert answer.status_code == 405 and answer.headers["Allow"] == "GET"


@pytest.mark.parametrize("address", ["/api/v1/", "/api/v1/nothing", "/api/v1/stations/", "/api/v1/taps/a/b",
                                     "/api/v1/taps/A/b/now"])
def test_an_unknown_address_is_a_problem_document(lab, address):
    answer = lab.manager.get(address)
    assert answer.status_code == 404 and answer.headers["Content-Type"] == "application/problem+json"
