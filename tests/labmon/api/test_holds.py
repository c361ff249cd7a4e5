"""Shelving and out of service over the API."""

import pytest

from labmon.alarms.models import AlarmHold
from labmon.experiments.models import Limit
from tests.labmon.api.test_alarms import ALARMS, make_alarm

HOLDS = "/api/v1/taps/bench-a/in/holds"
HOUR = {"for_s": 3600, "reason": "new patch cord"}


@pytest.mark.parametrize(("role", "status"), [
    ("manager", 200), ("owner", 200), ("researcher", 200), ("guest", 403), ("nobody", 401)])
def test_who_shelves_and_unshelves(lab, role, status):
    made = make_alarm(lab.tap, lab.experiment, returned_at=None)
    caller = getattr(lab, role)
    answer = caller.post(f"{ALARMS}/{made.pk}/shelve", HOUR)
    assert answer.status_code == status and caller.post(f"{ALARMS}/{made.pk}/unshelve").status_code == status
    if status == 200:
        assert answer.json()["state"] == "shelved" and answer.json()["shelved_until"]
        assert AlarmHold.objects.get().ended_by == lab.people[role]
    made.refresh_from_db()
    assert made.state == "unacknowledged"


@pytest.mark.parametrize(("body", "field"), [
    (HOUR | {"for_s": 14_401}, "for_s"), (HOUR | {"for_s": 0}, "for_s"), (HOUR | {"reason": "  "}, "reason"),
    ({"reason": "x"}, "for_s"), (HOUR | {"until": "x"}, "until")])
def test_the_field_at_fault_is_named(lab, body, field):
    made = make_alarm(lab.tap, returned_at=None)
    answer = lab.owner.post(f"{ALARMS}/{made.pk}/shelve", body)
    assert (answer.status_code, answer.json()["field"]) == (400, field) and not AlarmHold.objects.exists()


@pytest.mark.parametrize(("role", "status"), [
    ("manager", 201), ("owner", 201), ("stranger", 403), ("researcher", 403), ("guest", 403), ("nobody", 401)])
def test_who_takes_out_of_service(lab, role, status):
    answer = getattr(lab, role).post(HOLDS, {"kind": "out-of-service", "reason": "laser away"})
    assert answer.status_code == status
    if status == 201:
        said = lab.guest.get("/api/v1/holds").json()["holds"]
        assert said == [answer.json()] and said[0]["until"] is None and said[0]["by"] == role
        assert lab.researcher.post(f"/api/v1/holds/{said[0]['id']}/end").status_code == 403
        assert lab.owner.post(f"/api/v1/holds/{said[0]['id']}/end").json()["ended_at"]
        assert lab.guest.get("/api/v1/holds").json() == {"holds": []}


def test_one_limit_of_a_tap(lab):
    limit = Limit.objects.create(experiment=lab.experiment, tap=lab.tap, quantity="er_db")
    body = {"kind": "shelved", "alarms": "limit", "limit": limit.pk} | HOUR
    assert lab.researcher.post(HOLDS, body).json()["limit"] == limit.pk
    for wrong in ({"limit": None}, {"alarms": "all"}, {"limit": 10**6}, {"limit": -1}, {"limit": 2**70}):
        assert lab.researcher.post(HOLDS, body | wrong).status_code == 400
    assert lab.researcher.post(HOLDS, {"kind": "shelved", "reason": "x"}).json()["field"] == "for_s"


def test_what_one_may_not_see(lab):
    hidden = make_alarm(lab.hidden, returned_at=None)
    hold = lab.manager.post("/api/v1/taps/bench-b/in/holds", {"kind": "shelved"} | HOUR).json()
    assert lab.guest.get("/api/v1/holds").json() == {"holds": []}
    assert lab.guest.post(f"{ALARMS}/{hidden.pk}/shelve", HOUR).status_code == 404
    assert lab.guest.post(f"/api/v1/holds/{hold['id']}/end").status_code == 404
    assert lab.guest.post("/api/v1/taps/bench-b/in/holds", {"kind": "shelved"} | HOUR).status_code == 404
