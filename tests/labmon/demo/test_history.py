"""History in the store: what was written comes back, with boots, stamps and numbers as the station would have sent them."""

import numpy as np
import pytest

from ingest.models import StationBoot, TapBoot
from ingest.stations import NewTap, add_station
from ingest.store.read import read_readings
from labmon.demo import history
from labmon.demo.air import ROOMS
from labmon.demo.benches import bench_named
from labmon.demo.history import TimeAxis, write_bench, write_room
from labmon.demo.moments import moment
from labmon.demo.world import World

MONDAY_US = 1_930_089_600_000_000  # 2031-03-03
pytestmark = pytest.mark.django_db


@pytest.fixture
def slow_pace(monkeypatch):
    monkeypatch.setattr(history, "EARLY_CADENCE_S", 60.0)
    monkeypatch.setattr(history, "RECENT_CADENCE_S", 10.0)


def _written(name, until_s):
    bench, axis, world = bench_named(name), TimeAxis(MONDAY_US, MONDAY_US + round(until_s * 1e6)), World(15)
    station, _ = add_station(bench.station, bench.room, [NewTap(bench.tap, "two-port", bench.head.unit)])
    count = write_bench(world, bench, axis)
    tap = station.taps.get()
    return bench, world, tap, count, read_readings(tap.pk, axis.day_one_us, axis.until_us)


def test_readings_come_back_as_simulated(slow_pace):
    bench, world, _, count, readings = _written("V2", moment(3, 12))
    assert len(readings) == count > 10_000
    at_s = (readings.at_us - MONDAY_US) / 1e6
    expected = world.readings(bench, at_s)
    np.testing.assert_allclose(readings.columns["port2"], expected["port2"], rtol=1e-6)
    assert np.all(np.diff(readings.sequence) == 1)
    assert np.all(readings.lateness_us < 11_000_000)
    assert np.median(np.diff(at_s)) == pytest.approx(10.0)


def test_day_11_n2_keeps_its_1970_stamps_beside_the_servers_times(slow_pace):
    _, _, tap, _, readings = _written("N2", moment(11, 6))
    before, after = StationBoot.objects.filter(station=tap.station).order_by("first_arrival_us")
    reboot_us = MONDAY_US + round(moment(11, 4, 40) * 1e6)
    unset = readings.own_at_us < 1_000_000_000
    assert 3 <= unset.sum() <= 5
    assert np.all(readings.at_us[unset] > reboot_us + 35_000_000)
    assert np.array_equal(readings.is_server_timed, readings.at_us > reboot_us)
    assert (before.is_server_timed, after.is_server_timed) == (False, True)
    assert after.clock_fault
    assert after.firmware == "bench board 1.4"


def test_day_13_two_boots_of_s4_lie_side_by_side(slow_pace):
    _, _, tap, _, readings = _written("S4", moment(13, 18))
    assert TapBoot.objects.filter(tap=tap).count() == 2
    start_us = MONDAY_US + round(moment(13, 15) * 1e6)
    beside = readings.between(start_us, start_us + 25 * 60_000_000)
    assert len(np.unique(beside.boot_id)) == 2
    outside = readings.between(start_us - 3_600_000_000, start_us)
    assert len(np.unique(outside.boot_id)) == 1


def test_a_second_time_nothing_is_written(slow_pace):
    bench, world, tap, count, _ = _written("V2", moment(2, 0))
    axis = TimeAxis(MONDAY_US, MONDAY_US + round(moment(2, 6) * 1e6))
    assert write_bench(world, bench, axis) == 0
    assert len(read_readings(tap.pk, axis.day_one_us, axis.until_us)) == count


def test_a_room_has_its_climate(slow_pace):
    room = ROOMS[0]
    station, _ = add_station(room.station, room.name, [NewTap("air", "climate", interval_s=10.0)])
    axis = TimeAxis(MONDAY_US, MONDAY_US + round(moment(2, 0) * 1e6))
    assert write_room(World(2), room, axis) == 8640
    readings = read_readings(station.taps.get().pk, axis.day_one_us, axis.until_us)
    assert set(readings.columns) >= {"temperature_c", "humidity_pct", "pressure_hpa"}
    assert readings.columns["temperature_c"].mean() == pytest.approx(room.mean_c, abs=0.3)


def test_history_has_a_live_pace_at_its_end():
    axis = TimeAxis(0, round(moment(18, 7) * 1e6))
    assert axis.cadences == [(moment(16, 0), 6.0), (moment(18, 7), 1.0)]
