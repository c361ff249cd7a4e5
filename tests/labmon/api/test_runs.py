"""Runs over the API: planned, changed, ended, listed page by page; who may."""

from datetime import UTC, datetime, timedelta

import pytest
from django.utils import timezone

from labmon.experiments.actions import set_limit
from labmon.people.models import Role
from labmon.runs.models import Run
from tests.factories import make_experiment, make_person, make_run, make_tap

RUNS = "/api/v1/runs"
START = datetime(2027, 3, 4, 20, tzinfo=UTC)


@pytest.fixture(autouse=True)
def clock(monkeypatch):
    """An afternoon before the run; API keys and rights read the same clock."""
    monkeypatch.setattr("django.utils.timezone.now", lambda: START - timedelta(hours=4))


def wish(lab, **more):
    return {"experiment": lab.experiment.pk, "name": "Rb scan", "starts_at": "2027-03-04T20:00:00Z", "length_s": 43200} | more


@pytest.mark.parametrize(("role", "status"), [
    ("manager", 201), ("owner", 201), ("stranger", 201), ("researcher", 201), ("guest", 403), ("nobody", 401)])
def test_who_plans(lab, role, status):
    answer = getattr(lab, role).post(RUNS, wish(lab))
    assert answer.status_code == status and Run.objects.count() == (status == 201)
    if status == 201:
        said = answer.json()
        assert (said["owner"], said["planned_by"], said["state"]) == (role, role, "planned")
        assert (said["ends_at"], said["taps"]) == ("2027-03-05T08:00:00.000000Z", ["bench-a/in", "bench-a/sop"])
        assert lab.guest.get(f"{RUNS}/{said['id']}").json() == said


@pytest.mark.parametrize(("role", "status"), [("manager", 201), ("owner", 201), ("stranger", 403), ("researcher", 403)])
def test_who_plans_for_others(lab, role, status):
    assert getattr(lab, role).post(RUNS, wish(lab, owner=lab.people["researcher" if role != "researcher" else "owner"].username)
                                   ).status_code == status


@pytest.mark.parametrize("experiment", [0, -1, 10**9, "no such"])
def test_an_experiment_that_is_not_there_is_not_found(lab, experiment):
    answer = lab.researcher.post(RUNS, wish(lab, experiment=experiment))
    assert answer.status_code == 404 and "no such experiment for you" in answer.json()["title"] and not Run.objects.exists()


@pytest.mark.parametrize(("more", "field"), [
    ({"name": " "}, "name"), ({"starts_at": "tonight"}, "starts_at"), ({"starts_at": "2027-03-04T20:00:00"}, "starts_at"),
    ({"starts_at": "2027-03-04T20:00:00.5Z"}, "starts_at"), ({"ends_at": "2027-03-05T08:00:00Z"}, "ends_at"),
    ({"length_s": None}, "ends_at"), ({"length_s": 30}, "ends_at"), ({"length_s": 1e300}, "length_s"), ({"taps": []}, "taps"),
    ({"taps": ["bench-a/air"]}, "taps"), ({"taps": ["bench-b/in"]}, "taps"), ({"taps": ["x"]}, "taps[0]"),
    ({"deputy": "nobody at all"}, "deputy"), ({"deputy": "guest"}, "deputy"), ({"allowed_below_s": -1}, "allowed_below_s"),
    ({"wanted_trusted_share": 2}, "wanted_trusted_share")])
def test_the_field_at_fault_is_named(lab, more, field):
    answer = lab.researcher.post(RUNS, wish(lab, **more))
    assert (answer.status_code, answer.json()["field"]) == (400, field) and not Run.objects.exists()


@pytest.mark.parametrize("experiment", [0, 2**70, "no such", "nul\0"])
def test_an_experiment_that_is_not_there(lab, experiment):
    assert lab.manager.post(RUNS, wish(lab, experiment=experiment)).status_code in (400, 404)
    assert lab.manager.post(RUNS, wish(lab, experiment=lab.experiment.name)).status_code == 201


def test_a_time_that_is_taken_is_refused_by_the_other_runs_name(lab):
    lab.researcher.post(RUNS, wish(lab))
    answer = lab.owner.post(RUNS, wish(lab, name="other", starts_at="2027-03-05T07:00:00Z"))
    assert answer.status_code == 400 and "“Rb scan”" in answer.json()["title"] + answer.json()["detail"]


def test_change_stop_cancel_and_who_may(lab, monkeypatch):
    set_limit(lab.experiment, lab.tap, "er_db", alarm=20.0, by=None)
    said = lab.researcher.post(RUNS, wish(lab)).json()
    run = f"{RUNS}/{said['id']}"
    assert [(one["tap"], one["alarm"], one["until"]) for one in said["limits"]] == [("bench-a/in", 20.0, said["ends_at"])]
    other = make_person(Role.RESEARCHER, username="other")
    for caller, status in ((lab.stranger, 403), (lab.guest, 403), (lab.nobody, 401)):
        assert caller.patch(run, {"name": "x"}).status_code == status
        assert caller.post(f"{run}/stop").status_code == caller.post(f"{run}/cancel").status_code == status
    changed = lab.owner.patch(run, {"name": "longer", "deputy": other.username, "ends_at": "2027-03-05T09:00:00Z",
                                    "taps": ["bench-a/in"]})
    assert (changed.json()["deputy"], changed.json()["length_s"], changed.json()["taps"]) == ("other", 46800, ["bench-a/in"])
    assert lab.researcher.post(f"{run}/stop").json()["field"] == "run"
    monkeypatch.setattr("django.utils.timezone.now", lambda: START + timedelta(hours=1))
    assert lab.researcher.post(f"{run}/cancel").json()["field"] == "run"
    assert lab.researcher.patch(run, {"allowed_below_s": 5}).json()["field"] == "allowed_below_s"
    stopped = lab.researcher.post(f"{run}/stop", {"reason": "sample lost"}).json()
    assert (stopped["state"], stopped["ended_at"]) == ("over", "2027-03-04T21:00:00.000000Z")
    assert stopped["end_reason"] == "sample lost"
    again = lab.researcher.post(RUNS, wish(lab, starts_at="2027-03-04T22:00:00Z")).json()
    assert lab.manager.post(f"{RUNS}/{again['id']}/cancel", {"reason": "no dye"}).json()["state"] == "cancelled"


def test_lists_by_state_and_page_by_page(lab):
    origin = timezone.now()
    hours = (-30, -20, -1, 5, 9)
    runs = [make_run(lab.experiment, origin + timedelta(hours=hour), 2 * 3600) for hour in hours]
    make_run(make_experiment(make_tap()), origin)
    Run.objects.filter(pk=runs[4].pk).update(cancelled_at=origin)
    first = lab.guest.get(RUNS, count=3).json()
    rest = lab.guest.get(RUNS, count=3, before=first["next"]).json()
    assert [one["id"] for one in first["runs"] + rest["runs"]] == [run.pk for run in reversed(runs)] and rest["next"] is None
    for state, places in (("over", [1, 0]), ("running", [2]), ("planned", [3]), ("cancelled", [4])):
        said = lab.researcher.get(RUNS, state=state, experiment=lab.experiment.pk).json()["runs"]
        assert [one["id"] for one in said] == [runs[place].pk for place in places]
    assert lab.researcher.get(RUNS, before="nonsense").status_code == 200
    assert lab.guest.get(f"{RUNS}/{Run.objects.order_by('-pk')[0].pk}").status_code == 404


def test_a_list_takes_the_same_queries_for_many_runs(lab, django_assert_max_num_queries):
    for hour in range(50):
        make_run(lab.experiment, timezone.now() + timedelta(hours=hour))
    with django_assert_max_num_queries(12):
        assert len(lab.researcher.get(RUNS).json()["runs"]) == 50
