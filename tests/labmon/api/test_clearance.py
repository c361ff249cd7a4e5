"""Clearance over the API: what an outsider would count by hand."""

from datetime import timedelta

import pytest

from ingest.times import at_of
from labmon.people.keys import make_person_key
from labmon.people.models import Role
from labmon.runs.models import Run
from tests.factories import make_person
from tests.labmon.api.conftest import Caller
from tests.labmon.clearance.bench import DAY_US, HOUR_US, MONDAY_US, NIGHT_S, bench_with, nights_of

pytestmark = pytest.mark.django_db


def iso(us):
    return at_of(us).isoformat()


@pytest.fixture
def owner(db):
    return make_person(Role.OWNER)


@pytest.fixture
def caller(owner):
    return Caller(make_person_key(owner, by=None)[1])


def test_fourteen_of_fourteen(owner, caller):
    """JOB 7a: 14 comparable nights, none fails."""
    experiment, _, _ = bench_with(nights_of(19), owner=owner)
    start_us = MONDAY_US + 18 * DAY_US
    said = caller.get(f"/api/v1/experiments/{experiment.pk}/clearance", start=iso(start_us), length_s=NIGHT_S).json()
    assert said["sentence"] == "Cleared: 14 of 14 such nights held; failure up to 19 %."
    assert (said["verdict"], said["held"], said["count"]) == ("cleared", 14, 14) and said["reasons"] == []
    assert said["failure_bound"] == pytest.approx(1 - 0.05 ** (1 / 14))      # Clopper-Pearson for none of 14, closed form
    assert said["median_s"] is None and said["known_until"] == said["start"]
    limit = said["limits"][0]
    assert limit["tap"] == "north-1/eom-in" and limit["angle_now_deg"] == pytest.approx(3.0) and len(limit["counted"]) == 14
    points = {(point["what"], point["standing"]) for point in said["checklist"]}
    assert ("no open cause", "ready") in points and ("zero", "look") in points and ("call chain drilled", "look") in points


def test_what_failed_is_listed(owner, caller):
    experiment, _, _ = bench_with(nights_of(19, {3: 9.0}), owner=owner)
    said = caller.get(f"/api/v1/experiments/{experiment.pk}/clearance", start=iso(MONDAY_US + 18 * DAY_US)).json()
    assert said["sentence"] == "Not cleared: 13 of 14 such nights held; failure up to 30 %."
    failed = said["limits"][0]["failed"]
    assert len(failed) == 1 and failed[0]["beyond_s"] == 300.0 and failed[0]["worst_deg"] == pytest.approx(12.0)
    assert failed[0]["crossed_at"] == at_of(MONDAY_US + 3 * DAY_US + 2 * HOUR_US).isoformat(timespec="microseconds").replace(
        "+00:00", "Z")
    assert "8 more comparable nights without a failure would clear it." in said["remedies"]


def test_of_a_run(owner, caller):
    experiment, _, now_us = bench_with(nights_of(19), owner=owner)
    start = at_of(MONDAY_US + 18 * DAY_US)
    run = Run.objects.create(experiment=experiment, owner=owner, name="night", starts_at=start,
                             ends_at=start + timedelta(hours=12))
    run.taps.set(experiment.taps.all())
    said = caller.get(f"/api/v1/runs/{run.pk}/clearance").json()
    assert said["run"] == run.pk and said["sentence"] == "Cleared: 14 of 14 such nights held; failure up to 19 %."
    assert caller.get(f"/api/v1/runs/{run.pk + 1}/clearance").status_code == 404


def test_without_limit_or_reading(lab):
    said = lab.guest.get(f"/api/v1/experiments/{lab.experiment.pk}/clearance").json()
    assert said["verdict"] == "not enough evidence" and said["reason_codes"] == ["no_limit"] and said["share"] is None
    assert lab.nobody.get(f"/api/v1/experiments/{lab.experiment.pk}/clearance").status_code == 401


@pytest.mark.parametrize(("query", "field"), [
    ({"length_s": "5"}, "length_s"), ({"length_s": "nan"}, "length_s"), ({"length_s": "x"}, "length_s"),
    ({"allowed_s": "-1"}, "allowed_s"), ({"start": "tomorrow"}, "start"), ({"start": "2999-01-01T00:00:00Z"}, "start"),
    ({"lenght_s": "60"}, "lenght_s"), ({"length_s": "inf"}, "length_s")])
def test_the_parameter_at_fault_is_named(lab, query, field):
    answer = lab.owner.get(f"/api/v1/experiments/{lab.experiment.pk}/clearance", **query)
    assert (answer.status_code, answer.json()["field"]) == (400, field)
