"""A rehearsal in words, and on the experiment's page."""

import pytest

from analysis.judge.rehearsal import Call
from ingest.times import now_us
from labmon.experiments.models import LimitVersion
from labmon.experiments.rehearsal import Rehearsed
from labmon.people.models import Role
from labmon.screen.rehearsal_view import rehearsal_view
from tests.factories import NOON_US, make_experiment, make_person, make_tap, store_readings

S = 1_000_000
MONTH_US = 30 * 86_400 * S


def test_calls_in_one_sentence():
    calls = [Call(NOON_US, NOON_US + 600 * S, NOON_US, 900.0), Call(NOON_US + 3600 * S, None, None, None)]
    view = rehearsal_view(Rehearsed(NOON_US - MONTH_US, NOON_US, calls, 1, 600.0, 4200.0, 0.1))
    said = view.sentence.replace("\xa0", " ")
    assert said.startswith("In the last 30 days this limit would have called 2 times, 1 at night, 1 h 10")
    assert "at least 15 min before the limit in force" in said and [row[1] for row in view.rows] == ["warning", "alarm"]


def test_nobody():
    assert "called nobody" in rehearsal_view(Rehearsed(NOON_US - MONTH_US, NOON_US, [], 0, None, 0.0, 0.0)).sentence


@pytest.mark.django_db
def test_by_the_button_without_scripts_and_as_a_part(client):
    import numpy as np

    owner = make_person(Role.OWNER)
    tap = make_tap()
    experiment = make_experiment(tap, owner=owner)
    dark = np.full(600, 1e-6)
    dark[100:300] = 1e-4
    at_us = now_us() // S * S - 700 * S + np.arange(600) * S
    store_readings(tap, at_us, port1=1e-3, port2=dark, sequence=np.arange(600), boot="b")
    typed = {"tap": f"{tap.station.name}/{tap.name}", "quantity": "er_db", "alarm": "20", "on_delay_s": "60", "off_delay_s": "60"}
    address = f"/experiments/{experiment.pk}/limits/rehearse/"
    client.force_login(owner)
    page = client.post(address, typed)
    assert page.status_code == 200 and "would have called 1 time, " in page.content.decode()
    part = client.post(address, typed, headers={"X-Labmon-Part": "1"}).content.decode()
    assert "would have called 1 time, " in part and "<html" not in part
    assert client.post(address, typed | {"alarm": ""}).status_code == 422
    client.force_login(make_person(Role.RESEARCHER))
    assert client.post(address, typed).status_code == 403
    assert not LimitVersion.objects.exists()
