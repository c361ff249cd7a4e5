"""Runs: what may be planned, changed, stopped and cancelled, and that no two take one time."""

from datetime import UTC, datetime, timedelta

import pytest
from django.db import IntegrityError, connection
from django.utils import timezone
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.models import TapKind
from labmon.audit.models import AuditEntry
from labmon.errors import WriteError
from labmon.people.models import Role
from labmon.runs.actions import cancel_run, change_run, plan_run, stop_run
from labmon.runs.models import Run
from tests.factories import make_experiment, make_person, make_run, make_tap

pytestmark = pytest.mark.django_db
HOUR = timedelta(hours=1)


def whole_now():
    return timezone.now().replace(microsecond=0)


def refused(field, action, *args, **values):
    with pytest.raises(WriteError) as fault:
        action(*args, **values)
    assert fault.value.field == field and fault.value.why and fault.value.do
    return fault.value


@pytest.fixture
def tonight():
    """An experiment with a tap and a climate tap, and the wish for a run in an hour."""
    tap = make_tap()
    experiment = make_experiment(tap, make_tap(tap.station, kind=TapKind.CLIMATE))
    start = whole_now() + HOUR
    return experiment, {"by": make_person(Role.RESEARCHER), "name": "Rb scan", "starts_at": start, "ends_at": start + 12 * HOUR}


def test_a_run_belongs_to_who_plans_it_and_relies_on_the_taps_that_measure_light(tonight):
    experiment, wish = tonight
    run = plan_run(experiment, **wish | {"name": " Rb scan "})
    assert (run.name, run.owner, run.planned_by) == ("Rb scan", wish["by"], wish["by"])
    assert [tap.kind for tap in run.taps.all()] == [TapKind.TWO_PORT]
    entry = AuditEntry.objects.get()
    assert (entry.action, entry.subject, entry.after["name"]) == ("plan run", f"run/{run.pk}", "Rb scan")
    assert entry.after["taps"] == [f"{tap.station.name}/{tap.name}" for tap in run.taps.all()]


@pytest.mark.parametrize(
    ("field", "values"),
    [
        ("name", {"name": "  "}),
        ("name", {"name": "x" * 201}),
        ("allowed_below_s", {"allowed_below_s": -1.0}),
        ("allowed_below_s", {"allowed_below_s": float("nan")}),
        ("wanted_trusted_share", {"wanted_trusted_share": 1.5}),
        ("starts_at", {"starts_at": datetime(2031, 1, 1), "ends_at": datetime(2031, 1, 2, tzinfo=UTC)}),  # noqa: DTZ001
        ("taps", {"taps": []}),
    ],
)
def test_a_run_that_cannot_be_meant(tonight, field, values):
    experiment, wish = tonight
    refused(field, plan_run, experiment, **wish | values)
    assert not Run.objects.exists() and not AuditEntry.objects.exists()


@pytest.mark.parametrize(
    ("field", "start", "length"),
    [
        ("ends_at", HOUR, timedelta(seconds=59)),
        ("ends_at", HOUR, -HOUR),
        ("ends_at", HOUR, timedelta(days=31, seconds=1)),
        ("starts_at", timedelta(days=401), HOUR),
        ("starts_at", -timedelta(days=32), HOUR),
        ("starts_at", timedelta(microseconds=500), HOUR),
    ],
)
def test_times_that_cannot_be_meant(tonight, field, start, length):
    experiment, wish = tonight
    starts_at = whole_now() + start
    refused(field, plan_run, experiment, **wish | {"starts_at": starts_at, "ends_at": starts_at + length})


def test_taps_of_other_experiments_climate_taps_and_guests_are_refused(tonight):
    experiment, wish = tonight
    refused("taps", plan_run, experiment, **wish, taps=[make_tap()])
    refused("taps", plan_run, experiment, **wish, taps=[experiment.taps.get(kind=TapKind.CLIMATE)])
    refused("deputy", plan_run, experiment, **wish, deputy=make_person(Role.GUEST))
    refused("owner", plan_run, experiment, **wish, owner=make_person(Role.RESEARCHER, is_active=False))


def test_a_second_run_at_the_same_time_is_refused_by_the_other_ones_name(tonight):
    experiment, wish = tonight
    first = plan_run(experiment, **wish)
    later = wish | {"name": "other", "starts_at": wish["starts_at"] + 11 * HOUR, "ends_at": wish["ends_at"] + HOUR}
    fault = refused("starts_at", plan_run, experiment, **later)
    assert "“Rb scan”" in fault.why and f"{first.starts_at:%d %b %Y %H:%M} UTC" in fault.why
    after = plan_run(experiment, **later | {"starts_at": wish["ends_at"]})
    assert refused("starts_at", change_run, after, by=None, starts_at=wish["ends_at"] - HOUR).why.startswith("The run “Rb scan”")
    assert plan_run(make_experiment(make_tap()), **wish)


def test_the_database_itself_keeps_two_runs_apart():
    experiment = make_experiment(make_tap())
    make_run(experiment)
    with pytest.raises(IntegrityError, match="one_run_at_once_per_experiment"):
        make_run(experiment)


@settings(max_examples=40, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 50), st.integers(1, 20), st.booleans()), min_size=1, max_size=8))
def test_whatever_is_planned_no_two_overlap(wishes):
    experiment = make_experiment(make_tap())
    origin, planned = whole_now() + HOUR, []
    for start, length, is_cancelled in wishes:
        begin, end = origin + start * HOUR, origin + (start + length) * HOUR
        clashes = any(begin < one_end and one_begin < end for one_begin, one_end in planned)
        try:
            run = plan_run(experiment, by=None, name="x", starts_at=begin, ends_at=end)
        except WriteError:
            assert clashes
            continue
        assert not clashes
        if is_cancelled:
            cancel_run(run, by=None)
        else:
            planned.append((begin, end))
    Run.objects.filter(experiment=experiment).delete()


def test_before_the_start_everything_may_change(tonight):
    experiment, wish = tonight
    run, other = plan_run(experiment, **wish), make_person(Role.RESEARCHER)
    changed = change_run(
        run, by=other, name="longer", ends_at=wish["ends_at"] + HOUR, deputy=other, allowed_below_s=60.0, reason="more atoms"
    )
    assert (changed.name, changed.deputy, changed.allowed_below_s) == ("longer", other, 60.0)
    entry = AuditEntry.objects.order_by("-pk")[0]
    assert (entry.before["allowed_below_s"], entry.after["allowed_below_s"], entry.reason) == (0.0, 60.0, "more atoms")


def test_while_it_lasts_only_name_people_and_end_may_change(tonight):
    experiment, _ = tonight
    now = whole_now()
    run = make_run(experiment, now - HOUR, 7200.0)
    for field, value in {"starts_at": now - 2 * HOUR, "allowed_below_s": 5.0, "wanted_trusted_share": 0.5, "taps": []}.items():
        refused(field, change_run, run, by=None, **{field: value})
    refused("ends_at", change_run, run, by=None, ends_at=now - timedelta(minutes=1))
    assert change_run(run, by=None, name="new", ends_at=now + 3 * HOUR, starts_at=run.starts_at).ends_at == now + 3 * HOUR


def test_a_run_that_is_over_or_cancelled_stays_as_it_was(tonight):
    experiment, _ = tonight
    over = make_run(experiment, whole_now() - 2 * HOUR)
    gone = make_run(experiment, whole_now() + HOUR, cancelled_at=timezone.now())
    for run in (over, gone):
        refused("run", change_run, run, by=None, name="new")
        refused("run", cancel_run, run, by=None)
        refused("run", stop_run, run, by=None)


def test_stopping_ends_it_now_and_frees_the_time(tonight):
    experiment, wish = tonight
    run = make_run(experiment, whole_now() - HOUR, 14 * 3600.0)
    stopped = stop_run(run, by=wish["by"], reason="sample lost")
    assert abs(stopped.over_at - timezone.now()) < timedelta(seconds=5) and stopped.over_at.microsecond == 0
    assert stopped.ends_at == run.ends_at and stopped.ended_by == wish["by"] and stopped.end_reason == "sample lost"
    assert plan_run(experiment, **wish)
    assert AuditEntry.objects.filter(action="stop run", reason="sample lost").exists()


def test_cancelling_keeps_the_row_and_frees_the_time(tonight):
    experiment, wish = tonight
    run = cancel_run(plan_run(experiment, **wish), by=wish["by"], reason="no dye")
    assert run.cancelled_at and (run.cancelled_by, run.cancel_reason) == (wish["by"], "no dye")
    assert plan_run(experiment, **wish).pk != run.pk
    refused("run", stop_run, make_run(make_experiment(make_tap()), whole_now() + HOUR), by=None)


def test_the_exclusion_needs_no_extension():
    with connection.cursor() as cursor:
        cursor.execute("SELECT count(*) FROM pg_extension WHERE extname = 'btree_gist'")
        assert cursor.fetchone() == (0,)
