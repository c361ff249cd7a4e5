"""Experiments and limits: what may be set, what history it leaves."""

from datetime import timedelta

import pytest
from django.utils import timezone

from ingest.models import TapKind, Touch, Unit
from labmon.audit.models import AuditEntry
from labmon.errors import WriteError
from labmon.experiments.actions import change_experiment, create_experiment, retire_limit, set_limit
from labmon.experiments.models import Experiment, LimitVersion
from tests.factories import make_experiment, make_person, make_tap

pytestmark = pytest.mark.django_db


def refused(field, action, *args, **values):
    with pytest.raises(WriteError) as fault:
        action(*args, **values)
    assert fault.value.field == field and fault.value.why and fault.value.do
    return fault.value


def test_experiment_belongs_to_who_makes_it_and_is_written_down():
    person, tap = make_person(), make_tap()
    experiment = create_experiment(" EOM input ", [tap], by=person)
    assert (experiment.name, experiment.owner, list(experiment.taps.all())) == ("EOM input", person, [tap])
    entry = AuditEntry.objects.get()
    assert (entry.action, entry.subject) == ("create experiment", f"experiment/{experiment.pk}")
    assert entry.after["taps"] == [f"{tap.station.name}/{tap.name}"]


@pytest.mark.parametrize(
    ("field", "values"),
    [
        ("name", {"name": "  "}),
        ("name", {"name": "x" * 201}),
        ("name", {"name": "taken"}),
        ("no_reading_after_s", {"no_reading_after_s": 0}),
        ("no_reading_after_s", {"no_reading_after_s": float("inf")}),
        ("untrusted_after_s", {"untrusted_after_s": -1}),
    ],
)
def test_experiment_that_cannot_be_meant(field, values):
    make_experiment(name="taken")
    refused(field, create_experiment, **{"name": "new", "taps": [], "by": None} | values)
    assert Experiment.objects.count() == 1 and not AuditEntry.objects.exists()


def test_versions_are_numbered_and_the_audit_has_before_and_after():
    tap = make_tap()
    experiment, person = make_experiment(tap), make_person()
    first = set_limit(experiment, tap, "er_db", alarm=20.0, by=person)
    second = set_limit(experiment, tap, "er_db", alarm=17.0, warning=19.0, reason="fibre swapped", by=person)
    assert (first.limit, first.number, second.number) == (second.limit, 1, 2)
    entry = AuditEntry.objects.order_by("-pk")[0]
    assert (entry.before["alarm"], entry.after["alarm"], entry.reason, entry.person) == (20.0, 17.0, "fibre swapped", person)


def test_first_version_looks_back_a_day_later_ones_hold_from_now_and_leave_a_mark():
    tap = make_tap()
    experiment = make_experiment(tap)
    now = timezone.now()
    first = set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    second = set_limit(experiment, tap, "er_db", alarm=18.0, by=None)
    assert abs(first.valid_from - (now - timedelta(days=1))) < timedelta(seconds=5)
    assert abs(second.valid_from - now) < timedelta(seconds=5)
    assert Touch.objects.filter(tap=tap).count() == 2


@pytest.mark.parametrize(("quantity", "deadband"), [("er_db", 1.0), ("angle_deg", 1.0), ("dop", 0.01), ("power_w", 2e-5)])
def test_deadband_left_out_has_the_size_of_the_quantity(quantity, deadband):
    tap = make_tap(kind=TapKind.STOKES)
    alarm = {"er_db": 20.0, "angle_deg": 30.0, "dop": 0.9, "power_w": 1e-3}[quantity]
    assert set_limit(make_experiment(tap), tap, quantity, alarm=alarm, by=None).deadband == pytest.approx(deadband)


@pytest.mark.parametrize(
    ("field", "quantity", "values"),
    [
        ("quantity", "hue", {"alarm": 1}),
        ("quantity", "dop", {"alarm": 0.9}),
        ("alarm", "er_db", {"alarm": float("nan")}),
        ("alarm", "er_db", {"alarm": "20"}),
        ("alarm", "er_db", {"alarm": 300.0}),
        ("alarm", "angle_deg", {"alarm": 0.0}),
        ("alarm", "power_w", {"alarm": 0.0}),
        ("warning", "er_db", {"alarm": 20.0, "warning": 20.0}),
        ("warning", "er_db", {"alarm": 20.0, "warning": 18.0}),
        ("warning", "angle_deg", {"alarm": 20.0, "warning": 25.0}),
        ("on_delay_s", "er_db", {"alarm": 20.0, "on_delay_s": -1}),
        ("off_delay_s", "er_db", {"alarm": 20.0, "off_delay_s": 1e9}),
        ("deadband", "er_db", {"alarm": 20.0, "deadband": -0.5}),
        ("deadband", "angle_deg", {"alarm": 5.0, "deadband": 5.0}),
    ],
)
def test_limit_that_cannot_be_meant(field, quantity, values):
    tap = make_tap()
    refused(field, set_limit, make_experiment(tap), tap, quantity, by=None, **values)
    assert not LimitVersion.objects.exists()


def test_quantity_must_fit_the_tap():
    air, volts = make_tap(kind=TapKind.CLIMATE), make_tap(unit=Unit.VOLT)
    refused("quantity", set_limit, make_experiment(air), air, "er_db", alarm=20.0, by=None)
    refused("quantity", set_limit, make_experiment(volts), volts, "power_w", alarm=1.0, by=None)
    set_limit(make_experiment(volts), volts, "er_db", alarm=20.0, by=None)


def test_dop_that_could_never_clear_is_refused():
    tap = make_tap(kind=TapKind.STOKES)
    refused("deadband", set_limit, make_experiment(tap), tap, "dop", alarm=0.95, deadband=0.1, by=None)


def test_tap_must_be_watched():
    refused("tap", set_limit, make_experiment(), make_tap(), "er_db", alarm=20.0, by=None)


def test_version_must_begin_after_the_one_before_and_not_in_the_future():
    tap = make_tap()
    experiment = make_experiment(tap)
    set_limit(experiment, tap, "er_db", alarm=20.0, by=None)
    for wrong in (timezone.now() + timedelta(hours=1), timezone.now() - timedelta(days=2)):
        refused("valid_from", set_limit, experiment, tap, "er_db", alarm=20.0, valid_from=wrong, by=None)


def test_retired_limit_can_be_set_anew_but_not_retired_twice():
    tap = make_tap()
    experiment = make_experiment(tap)
    limit = set_limit(experiment, tap, "er_db", alarm=20.0, by=None).limit
    assert retire_limit(limit, by=None, reason="moved").is_retired
    refused("limit", retire_limit, limit, by=None)
    assert set_limit(experiment, tap, "er_db", alarm=21.0, by=None).number == 3


def test_tap_leaves_only_when_its_limits_are_retired():
    tap, other = make_tap(), make_tap()
    experiment = make_experiment(tap, other)
    limit = set_limit(experiment, tap, "er_db", alarm=20.0, by=None).limit
    refused("taps", change_experiment, experiment, by=None, taps=[other])
    retire_limit(limit, by=None)
    change_experiment(experiment, by=None, taps=[other], name="renamed", no_reading_after_s=30.0)
    experiment.refresh_from_db()
    assert (list(experiment.taps.all()), experiment.name, experiment.no_reading_after_s) == ([other], "renamed", 30.0)
