"""Lab floors: nobody sets a limit below one, and only who may set floors moves it (the doors ask for the right)."""

import pytest

from ingest.models import TapKind
from labmon.audit.models import AuditEntry
from labmon.errors import WriteError
from labmon.experiments.actions import retire_limit, set_limit
from labmon.experiments.floors import floors_of, limits_beyond, set_floor
from labmon.experiments.models import LimitVersion
from labmon.people.models import Role
from tests.factories import make_experiment, make_person, make_station, make_tap

pytestmark = pytest.mark.django_db


@pytest.fixture
def bench():
    tap = make_tap(make_station("b08"), "eom-in")
    return tap, make_experiment(tap)


def test_nobody_sets_a_limit_below_the_floor_not_even_a_manager(bench):
    tap, experiment = bench
    manager = make_person(Role.MANAGER)
    set_floor(tap.station, "er_db", 20.0, by=manager, reason="laser safety of nothing, quality of all")
    with pytest.raises(WriteError) as fault:
        set_limit(experiment, tap, "er_db", alarm=19.9, by=manager)
    assert fault.value.field == "alarm" and "20.0 dB" in fault.value.why and "lab manager may lower" in fault.value.do
    assert not LimitVersion.objects.exists()
    assert set_limit(experiment, tap, "er_db", alarm=20.0, by=manager).alarm == 20.0


def test_the_stricter_of_bench_and_tap_rules_and_lifting_frees(bench):
    tap, experiment = bench
    set_floor(tap.station, "er_db", 20.0, by=None, reason="all")
    set_floor(tap.station, "er_db", 23.0, by=None, reason="this one more", tap=tap)
    with pytest.raises(WriteError, match="b08/eom-in is 23"):
        set_limit(experiment, tap, "er_db", alarm=22.0, by=None)
    set_floor(tap.station, "er_db", None, by=None, reason="moved", tap=tap)
    assert floors_of([tap])[tap.pk, "er_db"].value == 20.0
    set_floor(tap.station, "er_db", 18.0, by=None, reason="lowered")
    assert set_limit(experiment, tap, "er_db", alarm=18.0, by=None).alarm == 18.0
    set_floor(tap.station, "er_db", None, by=None, reason="over")
    assert floors_of([tap]) == {}


def test_of_the_angle_the_floor_is_the_most():
    tap = make_tap(kind=TapKind.STOKES)
    set_floor(tap.station, "angle_deg", 20.0, by=None, reason="visibility")
    with pytest.raises(WriteError, match="at most 20.0°"):
        set_limit(make_experiment(tap), tap, "angle_deg", alarm=25.0, by=None)


def test_a_floor_needs_a_reason_and_something_to_lift_and_stands_in_the_audit(bench):
    tap, _ = bench
    for field, values in (("reason", {"reason": " "}), ("value", {"value": None}), ("quantity", {"quantity": "hue"}),
                          ("value", {"value": float("inf")})):
        with pytest.raises(WriteError) as fault:
            set_floor(tap.station, **({"quantity": "er_db", "value": 20.0, "reason": "x", "by": None} | values))
        assert fault.value.field == field
    set_floor(tap.station, "er_db", 20.0, by=None, reason="first")
    set_floor(tap.station, "er_db", 18.0, by=None, reason="lowered")
    entry = AuditEntry.objects.order_by("-pk").first()
    assert (entry.action, entry.subject, entry.before["value"], entry.after["value"]) == ("set floor", "station/b08", 20.0, 18.0)


def test_limits_that_stand_below_a_new_floor_are_named_and_stay(bench):
    tap, experiment = bench
    version = set_limit(experiment, tap, "er_db", alarm=17.0, by=None)
    assert [one.pk for one in limits_beyond(set_floor(tap.station, "er_db", 20.0, by=None, reason="x"))] == [version.pk]
    assert limits_beyond(set_floor(tap.station, "er_db", 17.0, by=None, reason="x")) == []


def test_under_a_floor_only_a_manager_retires(bench):
    tap, experiment = bench
    limit = set_limit(experiment, tap, "er_db", alarm=20.0, by=None).limit
    set_floor(tap.station, "er_db", 20.0, by=None, reason="x")
    with pytest.raises(WriteError, match="lab manager"):
        retire_limit(limit, by=make_person(Role.OWNER))
    assert retire_limit(limit, by=make_person(Role.MANAGER)).is_retired
