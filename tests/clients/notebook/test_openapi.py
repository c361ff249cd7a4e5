"""Each call of the client against the OpenAPI document that labmon serves: path, parameters, fields."""

import json
import re

import pytest
from django.test import Client
from labmon_notebook import calls
from labmon_notebook.calls import BASE, Call
from labmon_notebook.faults import NotThere, WrongQuestion

from tests.clients.notebook.conftest import asked

CALLS = {name: one for name, one in vars(calls).items() if isinstance(one, Call)}
LIMITED = ("er_db", "angle_deg", "dop", "power_w")
SPAN = "2031-03-04T12:00:00Z/PT2M"


@pytest.fixture(scope="module")
def served():
    return json.loads(Client().get("/api/v1/openapi.json").content)


@pytest.mark.parametrize("name", sorted(CALLS))
def test_the_call_is_published_with_all_its_parameters(served, name):
    call = CALLS[name]
    operation = served["paths"][BASE + call.path]["get"]
    said = {one["name"]: one for one in operation.get("parameters", ())}
    assert set(re.findall(r"{(\w+)}", call.path)) == {name for name, one in said.items() if one["in"] == "path"}
    assert set(call.query) <= {name for name, one in said.items() if one["in"] == "query"}
    assert {name for name, one in said.items() if one["in"] == "query" and one["required"]} <= set(call.query)


def everything(near, experiment):
    """A call of every function that asks."""
    near.stations(), near.taps(), near.now("bench-a/in"), near.experiments(), near.limits(experiment), near.holds()
    near.history("bench-a/in", SPAN), near.statistics("bench-a/in", SPAN), near.alarms(state="shelved", experiment=experiment)
    near.readings("bench-a/in", SPAN, as_of="2041-01-01T00:00:00Z"), near.runs(experiment=experiment, state="over")
    with pytest.raises(NotThere, match="run"):
        near.ledger(999)


def test_every_function_sends_what_the_table_says_and_every_call_has_a_function(near, read_lab):
    """Every answer on the way was held against its published shape (NearConnection)."""
    everything(near, read_lab.experiment.pk)
    used = set()
    for method, path, query in asked(near):
        (name,) = [name for name, call in CALLS.items() if re.fullmatch(re.sub(r"{\w+}", "[^/]+", BASE + call.path), path)]
        assert method == "get" and set(query) <= set(CALLS[name].query), (path, query)
        used.add(name)
    assert used == set(CALLS)


def test_a_parameter_that_the_server_does_not_know_is_refused(near):
    """The check itself: labmon says so when the client and the API drift apart."""
    with pytest.raises(WrongQuestion, match="colour") as caught:
        near.get("/alarms", colour="red")
    assert caught.value.field == "colour" and caught.value.status == 400


def properties(served, name, member):
    return set(served["components"]["schemas"][name]["properties"][member]["items"]["properties"])


@pytest.mark.parametrize(("frame_of", "shape", "beside", "left_out"), [
    (lambda near, _id: near.stations(), "Station", {"tap_count"}, {"taps"}),
    (lambda near, _id: near.taps(), "Tap", {"station", "room"}, {"name"}),
    (lambda near, _id: near.experiments(), "Experiment", set(), set()),
    (lambda near, _id: near.now("bench-a/in", "bench-a/sop"), "Now",
     {"sop1", "sop2", "sop3", *(f"last_trusted_{one}{end}" for one in LIMITED for end in ("", "_at"))},
     {"sop", "last_trusted"}),
])
def test_columns_are_the_published_fields(served, near, read_lab, frame_of, shape, beside, left_out):
    frame = frame_of(near, read_lab.experiment.pk)
    published = set(served["components"]["schemas"][shape]["properties"])
    assert {frame.index.name, *frame.columns} == (published - left_out) | beside


def test_columns_of_limits_and_alarms_are_the_published_fields(served, near, read_lab):
    from tests.labmon.api.test_alarms import make_alarm

    make_alarm(read_lab.tap, returned_at=None)
    read_lab.owner.post(f"/api/v1/experiments/{read_lab.experiment.pk}/limits",
                        {"tap": "bench-a/in", "quantity": "er_db", "alarm": 20.0, "reason": "the trap"})
    limits, alarms = near.limits(read_lab.experiment.pk), near.alarms()
    schemas = served["components"]["schemas"]
    assert set(limits.columns) == set(schemas["Limit"]["properties"]) | {"unit", "is_in_force"}
    assert {"id", *alarms.columns} == set(schemas["Alarm"]["properties"]) | {"unit"}
    assert limits["unit"].tolist() == ["dB"] and limits["is_in_force"].tolist() == [True] and len(alarms) == 1
