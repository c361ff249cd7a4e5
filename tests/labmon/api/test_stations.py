"""GET /stations: what is there, when heard, by which clock."""

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from ingest.models import Station, StationBoot, TapHeard
from ingest.times import at_of
from tests.factories import NOON_US, make_station, make_tap
from tests.labmon.api.conftest import SECOND_US

ADDRESS = "/api/v1/stations"


def stations(caller):
    return {one["name"]: one for one in caller.get(ADDRESS).json()["stations"]}


@pytest.mark.parametrize("role", ["manager", "owner", "researcher"])
def test_everyone_of_the_lab_sees_every_station(lab, role):
    assert stations(getattr(lab, role)).keys() == {"bench-a", "bench-b"}


def test_a_guest_sees_named_stations_only(lab):
    assert stations(lab.guest).keys() == {"bench-a"}


def test_a_station_tells_its_taps_and_room(lab):
    said = stations(lab.guest)["bench-a"]
    assert said["room"] == "room 1" and said["last_heard_at"] is None and said["clock_offset_s"] is None
    assert [(tap["tap"], tap["kind"], tap["unit"]) for tap in said["taps"]] == [
        ("bench-a/air", "climate", None), ("bench-a/in", "two-port", "W"), ("bench-a/sop", "stokes", "W")]


def test_a_brokers_hint_of_a_lost_connection_is_told(lab):
    assert stations(lab.guest)["bench-a"]["link_lost_at"] is None
    Station.objects.filter(name="bench-a").update(link_lost_at=at_of(NOON_US))
    assert stations(lab.guest)["bench-a"]["link_lost_at"] == "2031-03-04T12:00:00.000000Z"


def test_times_and_clock_are_those_of_the_newest_boot(lab):
    for number, (boot, offset_us) in enumerate([("old", 9_000_000), ("new", 1_250_000)]):
        StationBoot.objects.create(station=lab.tap.station, boot=boot, first_arrival_us=NOON_US, clock_offset_us=offset_us,
                                   last_arrival_us=NOON_US + number, firmware=f"fw {boot}",
                                   clock_fault="Seven minutes slow." if boot == "new" else "")
    TapHeard.objects.create(tap=lab.tap, last_arrival_us=NOON_US + SECOND_US, last_at_us=NOON_US)
    said = stations(lab.manager)["bench-a"]
    assert said["clock_offset_s"] == 1.25 and said["clock_fault"] == "Seven minutes slow." and said["firmware"] == "fw new"
    assert said["last_heard_at"] == "2031-03-04T12:00:01.000000Z"
    assert said["taps"][1]["newest_at"] == "2031-03-04T12:00:00.000000Z"


def test_unknown_columns_are_reported(lab):
    lab.tap.unknown_columns = ["laser_hours"]
    lab.tap.save()
    assert stations(lab.manager)["bench-a"]["taps"][1]["unknown_columns"] == ["laser_hours"]


def test_the_number_of_queries_does_not_grow_with_stations(lab):
    with CaptureQueriesContext(connection) as few:
        stations(lab.manager)
    for _number in range(5):
        station = make_station()
        for _tap in range(3):
            make_tap(station)
    with CaptureQueriesContext(connection) as many:
        assert len(stations(lab.manager)) == 7
    assert len(many) == len(few)


def test_a_misspelt_parameter_is_refused_by_name(lab):
    answer = lab.manager.get(ADDRESS, rooms="1")
    assert answer.status_code == 400 and answer.json()["field"] == "rooms"
