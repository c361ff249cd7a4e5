"""Ledgers over the API: read, made anew with reason and edits, two versions compared."""

from datetime import timedelta

import numpy as np
import pytest

from analysis.record.calibrations import new_version
from labmon.experiments.actions import set_limit
from labmon.runs.making import make_waiting_ledgers
from tests.factories import NOON, make_run
from tests.labmon.api.conftest import write


@pytest.fixture
def run(lab, monkeypatch):
    """Two minutes of the owner's run that is over: 30 dB for 60 s, 17 dB for 20 s, then nothing."""
    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON - timedelta(hours=1))
    set_limit(lab.experiment, lab.tap, "er_db", alarm=20.0, by=None)
    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON + timedelta(hours=1))
    write(lab.tap, port1=np.full(80, 1e-3), port2=np.concatenate([np.full(60, 1e-6), np.full(20, 2e-5)]))
    run = make_run(lab.experiment, NOON, 120, owner=lab.people["owner"])
    run.taps.set([lab.tap])
    return f"/api/v1/runs/{run.pk}/ledger"


def test_a_ledger_is_asked_for_made_and_read(lab, run):
    assert lab.owner.get(run).status_code == 404
    asked = lab.owner.post(run, {"reason": "first"})
    assert asked.status_code == 202 and asked.json()["state"] == "waiting" and asked.json()["good_s"] is None
    make_waiting_ledgers()
    said = lab.guest.get(run).json()
    assert (said["state"], said["good_s"], said["below_s"], said["no_reading_s"]) == ("made", 60, 20, 40)
    rows = [(one["class"], one["length_s"]) for one in said["intervals"]]
    assert rows == [("good", 60), ("below limit", 20), ("no reading", 40)]
    assert said["intervals"][1]["from"] == "2031-03-04T12:01:00.000000Z" and said["intervals"][1]["taps"] == ["bench-a/in"]
    assert said["usable_share"] == 0.5 and said["longest_good_from"] == "2031-03-04T12:00:00.000000Z"
    assert lab.guest.get(run, first=1).json()["intervals"] == said["intervals"][1:]


def test_versions_stay_and_are_compared(lab, run):
    lab.owner.post(run, {"reason": "first"})
    make_waiting_ledgers()
    new_version(lab.tap, NOON - timedelta(hours=2), {"zero2": -1e-5})
    span = {"from": "2031-03-04T12:01:50Z", "until": "2031-03-04T12:02:00Z", "why": "shutter"}
    assert lab.owner.post(run, {"reason": "zero was wrong", "unusable": [span]}).status_code == 202
    make_waiting_ledgers()
    newest = lab.guest.get(run).json()
    assert (newest["version"], newest["versions"], newest["below_s"]) == (2, [1, 2], 80)
    assert lab.guest.get(run, version=1).json()["good_s"] == 60
    change = lab.guest.get(f"{run}/change", before=1, after=2).json()
    assert change["changed_s"] == 60 and {"before": "good", "after": "below limit", "seconds": 60} in change["counts"]
    assert [(one["from"], one["after"]) for one in change["stretches"]] == [("2031-03-04T12:00:00.000000Z", "below limit")]
    assert lab.guest.get(f"{run}/change", before=1, after=9).status_code == 404


@pytest.mark.parametrize(("body", "field"), [
    ({"reason": ""}, "reason"), ({"reason": "x", "unusable": [{"from": "x"}]}, "unusable[0]"),
    ({"reason": "x", "unusable": [{"from": "noon", "until": "2031-03-04T12:02:00Z", "why": "x"}]}, "unusable[0]"),
    ({"reason": "x", "unusable": [{"from": "2031-03-04T11:00:00Z", "until": "2031-03-04T12:02:00Z", "why": "x"}]}, "unusable"),
    ({"reason": "x", "levels": {"one": 1.0}}, "levels"), ({"reason": "x", "levels": {"1": 1.0}}, "levels")])
def test_the_field_at_fault_is_named(lab, run, body, field):
    lab.owner.post(run, {"reason": "first"})
    make_waiting_ledgers()
    answer = lab.owner.post(run, body)
    assert (answer.status_code, answer.json()["field"]) == (400, field)
    assert lab.researcher.post(run, {"reason": "x"}).status_code == 403
