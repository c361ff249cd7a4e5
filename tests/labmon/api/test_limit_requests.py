"""A looser limit during a run over the API: 409 to one person; asked for by one, decided by another."""

from datetime import timedelta

import pytest
from django.utils import timezone

from tests.factories import make_run

ER17 = {"tap": "bench-a/in", "quantity": "er_db", "alarm": 17.0, "reason": "sample at stake"}


@pytest.fixture
def night(lab):
    """The lab in a run, with a limit at 20 dB; the addresses of its limits and requests."""
    limits = f"/api/v1/experiments/{lab.experiment.pk}/limits"
    assert lab.owner.post(limits, ER17 | {"alarm": 20.0}).status_code == 201
    make_run(lab.experiment, timezone.now() - timedelta(minutes=5))
    return lab, limits, f"{limits}/requests"


def test_one_person_is_refused_two_may(night):
    lab, limits, requests = night
    refused = lab.owner.post(limits, ER17)
    assert refused.status_code == 409 and "limits/requests" in refused.json()["detail"]
    asked = lab.owner.post(requests, ER17)
    assert asked.status_code == 201 and asked.json()["loosens"] == ["alarm"]
    number = asked.json()["id"]
    for caller, status in ((lab.owner, 403), (lab.researcher, 403), (lab.guest, 403), (lab.nobody, 401)):
        assert caller.post(f"/api/v1/limit-requests/{number}/grant").status_code == status
    granted = lab.manager.post(f"/api/v1/limit-requests/{number}/grant", {"note": "agreed"})
    assert granted.status_code == 200 and granted.json()["state"] == "granted"
    in_force = lab.owner.get(limits).json()["limits"][0]
    assert (in_force["alarm"], in_force["set_by"], in_force["consented_by"]) == (17.0, "owner", "manager")
    assert lab.manager.post(f"/api/v1/limit-requests/{number}/refuse").status_code == 400


def test_refused_and_withdrawn(night):
    lab, limits, requests = night
    first = lab.owner.post(requests, ER17).json()["id"]
    assert lab.manager.post(f"/api/v1/limit-requests/{first}/withdraw").status_code == 403
    assert lab.manager.post(f"/api/v1/limit-requests/{first}/refuse", {"note": "no"}).json()["state"] == "refused"
    second = lab.owner.post(requests, ER17 | {"retire": True}).json()
    assert second["wish"] is None and second["loosens"] == ["is_retired"]
    assert lab.owner.post(f"/api/v1/limit-requests/{second['id']}/withdraw").json()["state"] == "withdrawn"
    states = [one["state"] for one in lab.researcher.get(requests).json()["requests"]]
    assert states == ["withdrawn", "refused"] and lab.owner.get(limits).json()["limits"][0]["alarm"] == 20.0


def test_what_cannot_be_meant(night):
    lab, _, requests = night
    assert lab.owner.post(requests, ER17 | {"alarm": None}).json()["field"] == "alarm"
    assert lab.owner.post(requests, ER17 | {"reason": ""}).json()["field"] == "reason"
    assert lab.owner.post(requests, ER17 | {"alarm": 25.0}).status_code == 400
