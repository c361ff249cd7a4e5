"""Experiments and limits, read and written."""

import math

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from labmon.audit.models import AuditEntry
from labmon.experiments.actions import retire_limit, set_limit
from labmon.experiments.models import Experiment, Limit, LimitVersion
from tests.factories import make_experiment, make_tap

EXPERIMENTS = "/api/v1/experiments"
#: The body of the contract, word for word.
LIMIT = {"tap": "bench-a/in", "quantity": "er_db", "alarm": 20.0, "warning": 23.0, "on_delay_s": 60, "off_delay_s": 60,
         "deadband": 1.0, "reason": "trap needs it"}


def limits_of(experiment):
    return f"{EXPERIMENTS}/{experiment.pk}/limits"


def test_an_experiment_is_made_as_the_contract_says(lab):
    made = lab.owner.post(EXPERIMENTS, {"name": "night run", "taps": ["bench-a/in"]})
    assert made.status_code == 201 and isinstance(made.json()["id"], int)
    row = Experiment.objects.get(pk=made.json()["id"])
    assert row.owner == lab.people["owner"] and list(row.taps.all()) == [lab.tap]
    listed = lab.guest.get(EXPERIMENTS).json()["experiments"]
    assert made.json() in listed and [one["name"] for one in listed] == ["night run", "trap loading"]


@pytest.mark.parametrize(("role", "status"), [
    ("manager", 201), ("owner", 201), ("stranger", 403), ("researcher", 403), ("guest", 403), ("nobody", 401)])
def test_who_makes_an_experiment(lab, role, status):
    assert getattr(lab, role).post(EXPERIMENTS, {"name": "night run", "taps": ["bench-a/in"]}).status_code == status
    assert Experiment.objects.filter(name="night run").exists() == (status == 201)


@pytest.mark.parametrize(("body", "field"), [
    ({"name": ""}, "name"), ({"name": "  "}, "name"), ({"name": "x" * 201}, "name"), ({"name": "x" * 501}, "name"),
    ({"name": "a\x00b"}, "name"), ({"name": 7}, "name"), ({"name": "trap loading"}, "name"),
    ({"taps": ["bench-a/out"]}, "taps[0]"), ({"taps": ["bench-a/in", "nowhere"]}, "taps[1]"),
    ({"taps": ["\x00/in"]}, "taps[0]"), ({"taps": "bench-a/in"}, "taps"),
    ({"untrusted_after_s": 0}, "untrusted_after_s"), ({"no_reading_after_s": -1}, "no_reading_after_s"), ({"tap": "x"}, "tap")])
def test_an_experiment_names_the_field_at_fault(lab, body, field):
    answer = lab.manager.post(EXPERIMENTS, {"name": "night run", "taps": ["bench-a/in"]} | body)
    assert answer.status_code == 400
    assert answer.json()["field"].replace("[...]", "[0]") == field
    assert Experiment.objects.count() == 1


def test_a_guest_sees_experiments_of_named_benches_only(lab):
    make_experiment(lab.hidden, name="secret")
    assert [one["name"] for one in lab.guest.get(EXPERIMENTS).json()["experiments"]] == ["trap loading"]
    assert [one["name"] for one in lab.researcher.get(EXPERIMENTS).json()["experiments"]] == ["secret", "trap loading"]


def test_a_limit_is_set_as_the_contract_says(lab):
    made = lab.owner.post(limits_of(lab.experiment), LIMIT)
    assert made.status_code == 201
    said = made.json()
    assert {name: said[name] for name in LIMIT} == LIMIT
    assert said["alarm_db"] == 20.0 and said["alarm_deg"] == pytest.approx(2 * math.degrees(math.atan(0.1)))
    version = LimitVersion.objects.get(limit__experiment=lab.experiment)
    assert (version.alarm, version.set_by) == (20.0, lab.people["owner"])
    assert AuditEntry.objects.filter(reason="trap needs it", person=lab.people["owner"]).count() == 1


def test_only_what_is_needed_must_be_said(lab):
    said = lab.owner.post(limits_of(lab.experiment), {"tap": "bench-a/sop", "quantity": "dop", "alarm": 0.9}).json()
    assert said["warning"] is None and said["on_delay_s"] == 60.0 and 0 < said["deadband"] <= 0.05


def test_limits_in_force_and_their_history(lab):
    for alarm in (20.0, 21.0):
        lab.owner.post(limits_of(lab.experiment), LIMIT | {"alarm": alarm})
    lab.owner.post(limits_of(lab.experiment), {"tap": "bench-a/sop", "quantity": "angle_deg", "alarm": 9.0})
    said = lab.guest.get(limits_of(lab.experiment)).json()
    in_force = [(one["tap"], one["alarm"], one["version"]) for one in said["limits"]]
    assert in_force == [("bench-a/in", 21.0, 2), ("bench-a/sop", 9.0, 1)]
    first, second, _angle = said["history"]
    assert first["valid_until"] == second["valid_from"] and second["valid_until"] is None
    retire_limit(Limit.objects.get(quantity="er_db"), by=lab.people["owner"])
    said = lab.guest.get(limits_of(lab.experiment)).json()
    assert [one["tap"] for one in said["limits"]] == ["bench-a/sop"] and len(said["history"]) == 4


@pytest.mark.parametrize(("role", "status"), [
    ("manager", 201), ("owner", 201), ("stranger", 403), ("researcher", 403), ("guest", 403), ("nobody", 401)])
def test_who_sets_a_limit(lab, role, status):
    assert getattr(lab, role).post(limits_of(lab.experiment), LIMIT).status_code == status
    assert LimitVersion.objects.exists() == (status == 201)


@pytest.mark.parametrize(("body", "field"), [
    ({"alarm": None}, "alarm"), ({"alarm": "20"}, "alarm"), ({"warning": 19.0}, "warning"), ({"quantity": "colour"}, "quantity"),
    ({"quantity": "dop", "alarm": 0.9, "warning": None}, "quantity"), ({"tap": "bench-b/in"}, "tap"),
    ({"tap": "bench-a/air"}, "tap"),
    ({"on_delay_s": -1}, "on_delay_s"), ({"off_delay_s": 1e9}, "off_delay_s"), ({"deadband": -0.1}, "deadband"),
    ({"reason": "x" * 501}, "reason"), ({"level": 1}, "level")])
def test_a_limit_names_the_field_at_fault(lab, body, field):
    answer = lab.manager.post(limits_of(lab.experiment), LIMIT | body)
    assert answer.status_code == 400 and answer.json()["field"] == field
    assert not LimitVersion.objects.exists()


@pytest.mark.parametrize("left_out", ["tap", "quantity", "alarm"])
def test_a_missing_field_is_named(lab, left_out):
    body = {name: value for name, value in LIMIT.items() if name != left_out}
    answer = lab.manager.post(limits_of(lab.experiment), body)
    assert answer.status_code == 400 and answer.json()["field"] == left_out


def test_a_guest_does_not_find_hidden_limits(lab):
    hidden = make_experiment(lab.hidden)
    assert lab.guest.get(limits_of(hidden)).status_code == 404
    assert lab.guest.post(limits_of(hidden), LIMIT).status_code == 404
    assert lab.manager.get(f"{EXPERIMENTS}/999999999999999999/limits").status_code == 404


def test_the_number_of_queries_does_not_grow(lab):
    def count(address):
        with CaptureQueriesContext(connection) as seen:
            assert lab.manager.get(address).status_code == 200
        return len(seen)

    set_limit(lab.experiment, lab.tap, "er_db", alarm=20.0, by=None)
    few = count(EXPERIMENTS), count(limits_of(lab.experiment))
    for number in range(4):
        tap = make_tap(lab.tap.station)
        lab.experiment.taps.add(tap)
        set_limit(lab.experiment, tap, "er_db", alarm=20.0 + number, by=lab.people["owner"])
        make_experiment(tap, owner=lab.people["owner"])
    assert (count(EXPERIMENTS), count(limits_of(lab.experiment))) == few
