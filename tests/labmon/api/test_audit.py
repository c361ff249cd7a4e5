"""The audit over the API, and what it sees."""

import csv
import io
import json

import numpy as np
import pytest

from labmon.audit.models import AuditEntry
from tests.labmon.api.conftest import write

AUDIT = "/api/v1/audit"


def read(answer) -> bytes:
    return b"".join(answer.streaming_content)


def test_pages_and_narrowing(lab):
    for number in range(3):
        lab.owner.patch("/api/v1/taps/bench-a/in/calibration", {"zero1": number * 1e-9})
    lab.manager.patch("/api/v1/taps/bench-b/in/calibration", {"zero1": 1e-9})
    whole = lab.manager.get(AUDIT, action="set calibration").json()["entries"]
    assert [one["subject"] for one in whole] == ["tap/bench-b/in"] + ["tap/bench-a/in"] * 3
    first = lab.owner.get(AUDIT, bench="bench-a", action="set calibration", count=2).json()
    rest = lab.owner.get(AUDIT, bench="bench-a", action="set calibration", count=2, before=first["before"]).json()
    assert [one["id"] for one in first["entries"] + rest["entries"]] == [one["id"] for one in whole[1:]]
    assert rest["before"] is None
    assert lab.owner.get(AUDIT, bench="bench-b").json()["entries"] == []
    assert lab.manager.get(AUDIT, person="manager", span="2020-01-01T00:00:00Z/P1D").json()["entries"] == []
    for caller, status in ((lab.researcher, 403), (lab.guest, 403), (lab.nobody, 401)):
        assert caller.get(AUDIT).status_code == status
    assert lab.owner.get(AUDIT, span="yesterday").json()["field"] == "span"


@pytest.mark.parametrize("form", ["csv", "jsonl"])
def test_an_export_is_itself_written_down(lab, form):
    lab.owner.patch("/api/v1/taps/bench-a/in/calibration", {"zero1": 1e-9})
    answer = lab.owner.get(f"{AUDIT}/export", format=form, bench="bench-a", chain="yes")
    entry = AuditEntry.objects.order_by("-pk")[0]
    assert (entry.action, entry.subject, entry.after["format"]) == ("export audit", "station/bench-a", form)
    body = read(answer).decode()
    lines = list(csv.DictReader(io.StringIO(body, newline=""))) if form == "csv" else list(map(json.loads, body.splitlines()))
    assert [line["action"] for line in lines] == ["set calibration"] and len(lines[0]["chain"]) == 64
    assert int(lines[0]["id"]) <= entry.after["until_entry"] < entry.pk


def test_readings_taken_out_are_written_down(lab):
    write(lab.tap, port1=np.full(5, 1e-3), port2=np.full(5, 1e-5))
    read(lab.researcher.get("/api/v1/taps/bench-a/in/readings", span="2031-03-04T12:00:00Z/PT1M", format="csv"))
    entry = AuditEntry.objects.order_by("-pk")[0]
    assert (entry.person_name, entry.action, entry.subject, entry.after["format"]) == (
        "researcher", "export readings", "tap/bench-a/in", "csv")
    assert lab.owner.get(AUDIT, action="export readings").json()["entries"][0]["person"] == "researcher"
    before = AuditEntry.objects.count()
    lab.researcher.get("/api/v1/taps/bench-a/in/readings", span="nonsense")
    lab.nobody.get("/api/v1/taps/bench-a/in/readings", span="2031-03-04T12:00:00Z/PT1M")
    assert AuditEntry.objects.count() == before
