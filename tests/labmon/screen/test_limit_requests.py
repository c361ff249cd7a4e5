"""The experiment's page in a run, and the page of floors: who sees which buttons, and what they do."""

from datetime import timedelta

import pytest
from django.utils import timezone

from labmon.experiments.actions import set_limit
from labmon.experiments.floors import set_floor
from labmon.experiments.models import LimitRequest
from labmon.people.models import Role
from tests.factories import make_experiment, make_person, make_run, make_station, make_tap

pytestmark = pytest.mark.django_db
TYPED = {"tap": "n2/eom-in", "quantity": "er_db", "alarm": "17", "on_delay_s": "60", "off_delay_s": "60",
         "reason": "it calls all night"}


@pytest.fixture
def night():
    owner = make_person(Role.OWNER, username="asha")
    tap = make_tap(make_station("n2", owner=owner), "eom-in")
    experiment = make_experiment(tap, owner=owner, name="EOM input")
    limit = set_limit(experiment, tap, "er_db", alarm=20.0, warning=23.0, reason="residual modulation", by=owner).limit
    make_run(experiment, timezone.now() - timedelta(minutes=5), name="Rb scan")
    return owner, make_person(Role.MANAGER, username="maren"), experiment, limit


def text_of(answer):
    return " ".join(answer.content.decode().split())


def test_loosening_keeps_what_was_typed_and_offers_to_ask(client, night):
    owner, manager, experiment, limit = night
    client.force_login(owner)
    page = f"/experiments/{experiment.pk}/"
    answer = client.post(f"{page}limits/", TYPED)
    said = text_of(answer)
    assert answer.status_code == 422 and "may only be tightened" in said and "Ask a second person" in said
    assert 'value="17"' in said and "it calls all night" in said
    assert client.post(f"{page}limits/ask/", TYPED).status_code == 302
    own = text_of(client.get(page))
    assert "alarm 20.0 dB (11.4°) → 17.0 dB (16.1°)" in own
    assert "Withdraw" in own and ">Consent<" not in own
    client.force_login(manager)
    assert ">Consent<" in text_of(client.get(page))
    client.post(f"/limit-requests/{LimitRequest.objects.get().pk}/grant/", {"note": "agreed"})
    after = text_of(client.get(page))
    assert "asha with the consent of maren: alarm 20.0" in after and "granted by maren" in after
    assert limit.versions.count() == 2


def test_who_may_not_set_limits_sees_the_request_without_buttons(client, night):
    owner, _, experiment, _ = night
    client.force_login(owner)
    client.post(f"/experiments/{experiment.pk}/limits/ask/", TYPED)
    client.force_login(make_person(Role.RESEARCHER))
    said = text_of(client.get(f"/experiments/{experiment.pk}/"))
    assert "it calls all night" in said and ">Consent<" not in said and "Withdraw" not in said
    number = LimitRequest.objects.get().pk
    assert client.post(f"/limit-requests/{number}/grant/").status_code == 403


def test_retiring_in_a_run_is_asked_for(client, night):
    owner, manager, experiment, limit = night
    client.force_login(owner)
    client.post(f"/experiments/{experiment.pk}/limits/{limit.pk}/ask/", {"reason": "fibre is out"})
    client.force_login(manager)
    client.post(f"/limit-requests/{LimitRequest.objects.get().pk}/grant/")
    assert limit.versions.order_by("-number")[0].is_retired
    assert "→ retired" in text_of(client.get(f"/experiments/{experiment.pk}/"))


def test_floors_are_seen_by_all_and_set_by_managers(client, night):
    owner, manager, experiment, _ = night
    set_floor(experiment.taps.get().station, "er_db", 21.0, by=manager, reason="quality")
    client.force_login(owner)
    said = text_of(client.get("/stations/n2/floors/"))
    assert "extinction ratio at least 21.0" in said and "EOM input" in said and "Put it in force" not in said
    assert client.post("/stations/n2/floors/", {"quantity": "er_db", "value": "1", "reason": "x"}).status_code == 403
    assert "beyond the lab floor 21.0" in text_of(client.get(f"/experiments/{experiment.pk}/"))
    client.force_login(manager)
    wrong = client.post("/stations/n2/floors/", {"tap": "eom-in", "quantity": "er_db", "value": "999", "reason": "x"})
    assert wrong.status_code == 422 and "no sensible level" in text_of(wrong)
    assert client.post("/stations/n2/floors/", {"quantity": "er_db", "value": "", "reason": "over"}).status_code == 302
    assert "has no lab floor" in text_of(client.get("/stations/n2/floors/"))


def test_the_form_comes_with_proposals_and_their_reason(client, night):
    owner, _, experiment, _ = night
    client.force_login(owner)
    said = text_of(client.get(f"/experiments/{experiment.pk}/"))
    assert 'name="off_delay_s" value="300"' in said and "rings down" in said and "data-proposals=" in said
