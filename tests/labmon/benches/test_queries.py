"""What a bench's row and page say, and at which cost."""

from datetime import timedelta

import numpy as np
import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from analysis.record.calibrations import new_version
from ingest.models import DoorUp, SetAside, TapKind
from labmon.benches.queries import aside_rows, bench_rows, now_of, station_facts
from labmon.experiments.actions import set_limit
from labmon.people.models import Role
from labmon.pipeline.process import process_touched
from labmon.pipeline.rolling import roll_up_coarse_due, roll_up_due
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_station, make_tap, store_readings
from tests.labmon.pipeline.lab import S, ports_of

pytestmark = pytest.mark.django_db


@pytest.fixture(autouse=True)
def noon(monkeypatch):
    """It is half a minute past noon, and the door has been up since morning."""
    monkeypatch.setattr("django.utils.timezone.now", lambda: NOON + timedelta(seconds=30))
    DoorUp.objects.create(
        process="00000000-0000-0000-0000-000000000001", from_us=NOON_US - 6 * 3600 * S, until_us=NOON_US + 3600 * S
    )


def make_bench(er_db, *, alarm=20.0, warning=23.0, name="", **kind):
    station = make_station(name)
    tap = make_tap(station, "out", **kind)
    experiment = make_experiment(tap)
    if alarm is not None:
        set_limit(experiment, tap, "er_db", alarm=alarm, warning=warning, by=None)
    if er_db is not None:
        at_us = NOON_US + np.arange(30) * S
        store_readings(tap, at_us, **ports_of(np.full(30, er_db)))
    return tap


def rows(now_us=NOON_US + 30 * S):
    process_touched(now_us=NOON_US + 30 * S)
    return {row.station: row for row in bench_rows(make_person(Role.RESEARCHER), now_us=now_us)}


def test_words_and_order_of_the_lab():
    make_bench(30.0, name="good")
    make_bench(21.0, name="thin")
    make_bench(18.0, name="low")
    make_bench(25.0, name="free", alarm=None)
    make_bench(None, name="new")
    found = rows()
    assert {name: row.state for name, row in found.items()} == {
        "low": "below limit",
        "thin": "thin",
        "good": "in spec",
        "free": "no limit",
        "new": "never heard",
    }
    assert list(found) == ["low", "thin", "good", "free", "new"]


def test_margin_in_db_and_degrees_of_the_job_paper():
    """JOB 7a: limit 20, now 30 dB leaves 7.8 degrees: 2 atan(10^(-20/20)) - 2 atan(10^(-30/20)) = 11.42 - 3.62."""
    make_bench(30.0, name="n2")
    row = rows()["n2"]
    assert row.margin_db == pytest.approx(10.0) and row.margin_deg == pytest.approx(7.80, abs=0.005)
    assert (row.limit_quantity, row.limit_alarm, row.trust) == ("er_db", 20.0, "trusted")


def test_bound_is_said_to_be_one_and_undecided_where_it_does_not_meet_the_limit():
    tap = make_bench(None, name="dark")
    new_version(tap, NOON - timedelta(days=1), {"floor1": 1e-9, "floor2": 1e-6})
    store_readings(tap, [NOON_US], port1=1e-3, port2=1e-7)
    row = rows(NOON_US + S)["dark"]
    assert row.er_is_lower_bound and row.margin_is_bound and row.state == "in spec" and row.margin_db > 0
    store_readings(tap, [NOON_US + 29 * S], port1=2e-5, port2=1e-7)
    row = rows()["dark"]
    assert row.state == "undecided" and row.trust == "doubtful" and "At floor, cannot tell" in row.reasons


def test_silence_is_shown_at_three_intervals_and_counts_only_while_the_door_was_up():
    make_bench(30.0, name="n1")
    last_us = NOON_US + 29 * S
    assert rows(last_us + 3 * S)["n1"].state == "in spec"
    row = rows(last_us + 4 * S)["n1"]
    assert row.state == "no reading" and row.is_silent and row.silent_s == pytest.approx(4.0)
    DoorUp.objects.update(until_us=last_us + 1 * S)
    assert rows(last_us + 40 * S)["n1"].state == "in spec"


def test_guest_sees_named_benches_only():
    tap, _ = make_bench(30.0, name="mine"), make_bench(30.0, name="other")
    process_touched(now_us=NOON_US + 30 * S)
    guest = make_person(Role.GUEST)
    guest.guest_stations.add(tap.station)
    assert [row.station for row in bench_rows(guest, now_us=NOON_US + 30 * S)] == ["mine"]


def test_course_of_the_day_is_hourly_er_of_sums():
    tap = make_bench(None, name="n1")
    for hour, er_db in ((3, 30.0), (1, 20.0)):
        store_readings(tap, NOON_US - hour * 3600 * S + np.arange(60) * S, **ports_of(np.full(60, er_db)))
    half = np.where(np.arange(60) % 2, 20.0, 40.0)
    store_readings(tap, NOON_US + np.arange(60) * S, **ports_of(half))
    process_touched(now_us=NOON_US + 60 * S)
    roll_up_due(now_us=NOON_US + 60 * S)
    roll_up_coarse_due()
    course = rows(NOON_US + 60 * S)["n1"].sparkline
    assert len(course.values) == 24 and course.bucket_s == 3600
    assert course.values[:20] == [None] * 20
    assert course.values[21] is None
    assert [course.values[20], course.values[22], course.values[23]] == pytest.approx([30.0, 20.0, 22.967], abs=1e-3)


def test_station_page_facts():
    tap = make_bench(22.0, name="n1")
    new_version(tap, NOON - timedelta(days=1), {"zero2": 1e-9})
    SetAside.objects.create(
        station=tap.station, tap=tap, arrival_us=NOON_US, field="port2", why="null", do="leave out", reading={}, digest=b"x"
    )
    process_touched(now_us=NOON_US + 30 * S)
    facts = station_facts(tap.station, now_us=NOON_US + 30 * S)
    (shown,) = facts.taps
    assert (shown.state, shown.calibration.zero2, facts.set_aside) == ("thin", 1e-9, 1)
    (limit,) = shown.limits
    assert (limit.alarm_in_db, round(limit.alarm_in_degrees, 2)) == (20.0, 11.42)
    assert shown.now.er_db == pytest.approx(22.0, abs=0.01) and shown.now.age_s == pytest.approx(1.0)
    assert aside_rows(tap.station)[0].field == "port2"


def test_now_of_a_tap_never_heard_is_nothing():
    assert now_of(make_tap()) is None


def test_climate_station_shows_its_air():
    tap = make_tap(make_station("air"), kind=TapKind.CLIMATE)
    store_readings(tap, [NOON_US + 29 * S], temperature_c=21.5)
    row = rows()["air"]
    assert (row.state, row.kind, row.quantity, row.value) == ("no limit", "climate", "temperature_c", 21.5)


def test_queries_do_not_grow_with_benches():
    reader, counts = make_person(), []
    for benches in (2, 15):
        for _ in range(benches):
            make_bench(30.0)
        process_touched(now_us=NOON_US + 30 * S)
        with CaptureQueriesContext(connection) as queries:
            bench_rows(reader, now_us=NOON_US + 30 * S)
        counts.append(len(queries))
    assert counts[0] == counts[1] <= 12
