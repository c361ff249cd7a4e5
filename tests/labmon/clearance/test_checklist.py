"""The checklist before a run, each point from stored rows."""

from datetime import timedelta

import pytest
from django.utils import timezone

from analysis.record.calibrations import new_version
from ingest.models import StationBoot, TapHeard, TapKind
from ingest.times import us_of
from labmon.clearance.checklist import Standing, checklist
from labmon.drills.models import Drill
from tests.factories import make_boot, make_station, make_tap

pytestmark = pytest.mark.django_db
MINUTE_US = 60_000_000


def points_of(*taps, causes=(), now=None):
    return {(point.what, point.about): point for point in checklist(taps, causes, now or timezone.now())}


def heard(tap, *, ago_s=1.0, late_s=0.2):
    now_us = us_of(timezone.now())
    last_us = now_us - round(ago_s * 1e6)
    TapHeard.objects.create(tap=tap, last_arrival_us=last_us, last_at_us=last_us - round(late_s * 1e6))


@pytest.fixture
def tap(db):
    return make_tap(make_station("n2"), "eom-in")


def test_a_bench_that_is_ready(tap):
    heard(tap)
    make_boot(tap)
    new_version(tap, timezone.now() - timedelta(days=2), {"zero2": 1e-9})
    Drill.objects.create(person_name="asha", begun_at=timezone.now(), ended_at=timezone.now() - timedelta(days=3))
    points = points_of(tap)
    assert {key: point.standing for key, point in points.items()} == dict.fromkeys(
        [("station alive", "n2/eom-in"), ("zero", "n2/eom-in"), ("spool empty", "n2/eom-in"), ("clock", "n2"),
         ("no open cause", "alarms"), ("call chain drilled", "lab")], Standing.READY)
    assert points["zero", "n2/eom-in"].said.startswith("Taken 2 d")


def test_a_bench_that_is_not(tap):
    heard(tap, ago_s=7200.0, late_s=3600.0)
    make_boot(tap)
    StationBoot.objects.update(clock_fault="clock 7 min ahead", is_server_timed=True)
    new_version(tap, timezone.now() - timedelta(days=40), {"zero2": 1e-9})
    Drill.objects.create(person_name="asha", begun_at=timezone.now(), ended_at=timezone.now() - timedelta(days=31))
    points = points_of(tap, causes=["laser hops"])
    assert {point.standing for point in points.values()} == {Standing.LOOK} and all(point.do for point in points.values())
    assert points["spool empty", "n2/eom-in"].said == "What arrives is 1 h 00 old."
    assert points["clock", "n2"].said == "clock 7 min ahead." and points["no open cause", "alarms"].said == "Open: laser hops."


def test_what_was_never_heard_or_taken(tap):
    points = points_of(tap)
    assert points["station alive", "n2/eom-in"].said == "It was never heard."
    assert points["zero", "n2/eom-in"].said == "No zero is on record."
    assert points["spool empty", "n2/eom-in"].standing == points["clock", "n2"].standing == Standing.UNKNOWN
    assert points["call chain drilled", "lab"].said == "No drill has got through yet."


def test_a_drill_that_failed_proves_nothing(tap):
    Drill.objects.create(person_name="asha", begun_at=timezone.now(), ended_at=timezone.now(), failed_step="handed")
    assert points_of(tap)["call chain drilled", "lab"].standing is Standing.LOOK


def test_polarimeters_have_no_zero_and_climate_taps_no_point():
    station = make_station("n1")
    head, air = make_tap(station, "head", kind=TapKind.STOKES), make_tap(station, "air", kind=TapKind.CLIMATE)
    assert {about for what, about in points_of(head, air) if what != "clock"} == {"n1/head", "alarms", "lab"}
    assert ("zero", "n1/head") not in points_of(head, air)
