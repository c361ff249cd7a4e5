"""Versions by valid time and entry time, and what cannot be meant."""

from datetime import timedelta

import pytest
from django.utils import timezone

from analysis.models import Calibration, RollupDue
from analysis.record.calibrations import CalibrationError, new_version, version_at, versions_of
from ingest.models import TapKind, Touch
from tests.factories import NOON, NOON_US, make_tap, store_readings

pytestmark = pytest.mark.django_db
HOUR = timedelta(hours=1)


def test_missing_fields_are_those_of_the_version_valid_then():
    tap = make_tap()
    new_version(tap, NOON, {"zero1": 1e-9, "gain_ratio": 1.1})
    new_version(tap, NOON + 2 * HOUR, {"gain_ratio": 1.3})
    between = new_version(tap, NOON + HOUR, {"floor2": 2e-9})
    assert (between.zero1, between.gain_ratio, between.floor2) == (1e-9, 1.1, 2e-9)
    assert version_at(tap.pk, NOON + 3 * HOUR).gain_ratio == 1.3 and version_at(tap.pk, NOON + 3 * HOUR).floor2 == 0.0


def test_before_the_first_version_nothing_is_corrected():
    tap = make_tap()
    new_version(tap, NOON, {"zero1": 1e-9})
    assert version_at(tap.pk, NOON - HOUR) is None


def test_later_entry_of_the_same_moment_holds_and_the_old_knowledge_stays_readable():
    tap = make_tap()
    new_version(tap, NOON, {"zero2": 1e-9})
    then = timezone.now()
    new_version(tap, NOON, {"zero2": 2e-9})
    assert version_at(tap.pk, NOON).zero2 == 2e-9 and version_at(tap.pk, NOON, as_of=then).zero2 == 1e-9
    assert [one.zero2 for one in versions_of([tap.pk])[tap.pk]] == [2e-9]
    assert [one.zero2 for one in versions_of([tap.pk], as_of=then)[tap.pk]] == [1e-9]
    assert Calibration.objects.count() == 2


def test_wanted_state_is_kept_as_a_unit_vector():
    assert new_version(make_tap(kind=TapKind.STOKES), NOON, {"wanted_state": [0, 3, 4]}).wanted_state == [0.0, 0.6, 0.8]


def test_new_zero_is_taken_when_it_begins_to_hold_unless_said():
    tap = make_tap()
    assert new_version(tap, NOON, {"zero1": 1e-9}).zero_taken_at == NOON
    assert new_version(tap, NOON + HOUR, {"gain_ratio": 2.0}).zero_taken_at == NOON
    assert new_version(tap, NOON + 2 * HOUR, {"zero2": 0.0, "zero_taken_at": NOON - HOUR}).zero_taken_at == NOON - HOUR


@pytest.mark.parametrize(
    ("field", "value"),
    [
        ("zero1", "dark"),
        ("zero1", float("nan")),
        ("zero1", None),
        ("zero1", True),
        ("gain_ratio", 0),
        ("gain_ratio", -1.0),
        ("floor1", -1e-9),
        ("saturation1", 0.0),
        ("leakage", [[1, 1], [1, 1]]),
        ("leakage", [[1, 0]]),
        ("leakage", [[1, 0], [0, float("inf")]]),
        ("leakage", 3),
        ("wanted_port", 3),
        ("wanted_port", True),
        ("wanted_state", [1, 0]),
        ("wanted_state", [0, 0, 0]),
        ("wanted_state", "H"),
        ("handedness", "left"),
        ("monitor_ratio", -2.0),
        ("zero_taken_at", "noon"),
        ("colour", 1),
    ],
)
def test_what_cannot_be_meant_is_refused_by_field(field, value):
    tap = make_tap()
    with pytest.raises(CalibrationError) as refused:
        new_version(tap, NOON, {field: value})
    assert refused.value.field == field and refused.value.why and refused.value.do
    assert not Calibration.objects.exists()


def test_climate_tap_has_none():
    with pytest.raises(CalibrationError, match="no optical calibration"):
        new_version(make_tap(kind=TapKind.CLIMATE), NOON, {"zero1": 0.0})


def test_derived_values_are_due_from_valid_from_to_the_next_version():
    tap = make_tap()
    store_readings(tap, [NOON_US, NOON_US + 7200 * 10**6], port1=1e-3, port2=1e-6)
    new_version(tap, NOON + HOUR, {"zero2": 1e-9})
    RollupDue.objects.all().delete()
    Touch.objects.all().delete()
    new_version(tap, NOON - HOUR, {"zero2": 2e-9})
    due, touch = RollupDue.objects.get(), Touch.objects.get()
    assert (
        (due.first_at_us, due.last_at_us)
        == (touch.first_at_us, touch.last_at_us)
        == (NOON_US - 3600 * 10**6, NOON_US + 3600 * 10**6 - 1)
    )


def test_version_behind_the_newest_reading_makes_nothing_due():
    tap = make_tap()
    store_readings(tap, [NOON_US], port1=1e-3, port2=1e-6)
    Touch.objects.all().delete()
    new_version(tap, NOON + HOUR, {"zero2": 1e-9})
    assert not RollupDue.objects.exists() and not Touch.objects.exists()
