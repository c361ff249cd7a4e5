"""The logbook over the API."""

import pytest

from labmon.logbook.models import ConfigurationChange, LogEntry

LOG = "/api/v1/stations/bench-a/log"
SAID = {"text": "spooled anew", "at": "2026-03-04T12:00:00Z", "until": "2026-03-04T12:30:00Z", "tag": "repair"}


@pytest.mark.parametrize(("role", "status"), [
    ("manager", 201), ("owner", 201), ("stranger", 201), ("researcher", 201), ("guest", 403), ("nobody", 401)])
def test_who_writes(lab, role, status):
    answer = getattr(lab, role).post(LOG, SAID)
    assert answer.status_code == status and LogEntry.objects.count() == (status == 201)
    if status == 201:
        said = lab.guest.get(LOG).json()["entries"][0]
        assert said["text"] == "spooled anew" and said["until"] == "2026-03-04T12:30:00.000000Z"
        assert role not in (said["by"],) and said["by"].endswith(lab.people[role].role)


def test_without_time_it_is_about_now(lab):
    said = lab.researcher.post(LOG, {"tag": "touched", "tap": "in"}).json()
    assert said["tap"] == "bench-a/in" and said["until"] is None and said["was_change"] is None
    answered = lab.researcher.post(f"/api/v1/log/{said['id']}/change", {"configuration_change": None}).json()
    assert answered["was_change"] is False


@pytest.mark.parametrize(("body", "field"), [
    ({"text": ""}, "text"), (SAID | {"tag": "gossip"}, "tag"), (SAID | {"at": "noon"}, "at"), (SAID | {"until": "noon"}, "until"),
    (SAID | {"tap": "bench-b/in"}, "tap"), (SAID | {"tap": "nowhere"}, "tap"), (SAID | {"text": "x" * 4001}, "text"),
    (SAID | {"configuration_change": "weather"}, "change"), (SAID | {"until": "2020-01-01T00:00:00Z"}, "until_at")])
def test_the_field_at_fault_is_named(lab, body, field):
    answer = lab.researcher.post(LOG, body)
    assert (answer.status_code, answer.json()["field"]) == (400, field) and not LogEntry.objects.exists()


def test_edit_change_strike(lab):
    number = lab.researcher.post(LOG, SAID | {"configuration_change": "fibre"}).json()["id"]
    entry = f"/api/v1/log/{number}"
    said = lab.researcher.patch(entry, {"text": "re-spooled", "until": ""}).json()
    assert (said["text"], said["until"], said["tag"]) == ("re-spooled", None, "repair")
    assert [one["text"] for one in said["earlier"]] == ["spooled anew"] and said["configuration_change"] == "fibre"
    assert lab.owner.post(f"{entry}/change", {"configuration_change": "joint"}).json()["configuration_change"] == "joint"
    for caller, status in ((lab.stranger, 403), (lab.guest, 403), (lab.nobody, 401)):
        assert caller.patch(entry, {"text": "no"}).status_code == status
        assert caller.post(f"{entry}/change", {"configuration_change": None}).status_code == status
        assert caller.post(f"{entry}/strike").status_code == status
    said = lab.manager.post(f"{entry}/strike").json()
    assert said["struck_at"] and said["configuration_change"] is None
    assert not ConfigurationChange.objects.filter(withdrawn_at=None).exists()


def test_pages_and_choices(lab):
    for minute in range(5):
        tag = "repair" if minute % 2 else "note"
        lab.owner.post(LOG, {"text": str(minute), "at": f"2026-03-04T12:0{minute}:00Z", "tag": tag})
    first = lab.guest.get(LOG, count=3).json()
    rest = lab.guest.get(LOG, count=3, before=first["before"]).json()
    assert [one["text"] for one in first["entries"] + rest["entries"]] == list("43210") and rest["before"] is None
    assert [one["text"] for one in lab.guest.get(LOG, tag="repair").json()["entries"]] == ["3", "1"]
    assert [one["text"] for one in lab.guest.get(LOG, span="2026-03-04T12:01:00Z/PT2M").json()["entries"]] == ["2", "1"]


def test_what_one_may_not_see(lab):
    number = lab.owner.post("/api/v1/stations/bench-b/log", {"text": "hidden"}).json()["id"]
    assert lab.guest.get("/api/v1/stations/bench-b/log").status_code == 404
    assert lab.guest.post("/api/v1/stations/bench-b/log", {"text": "x"}).status_code == 404
    for answer in (lab.guest.patch(f"/api/v1/log/{number}", {"text": "x"}), lab.guest.post(f"/api/v1/log/{number}/strike"),
                   lab.guest.post(f"/api/v1/log/{number}/change", {"configuration_change": None})):
        assert answer.status_code == 404
