"""The demo's stations through the lab's real HTTP door: each reading once, wrong clocks seen for what they are."""

import threading
import time

import numpy as np
import pytest
import uvicorn

from ingest.door.asgi import DoorApplication
from ingest.models import StationBoot, Tap
from ingest.stations import NewTap, add_station
from ingest.store.read import read_readings
from ingest.times import now_us
from labmon.demo.benches import bench_named
from labmon.demo.door import Door, NoAnswer
from labmon.demo.moments import moment
from labmon.demo.spool import Spool
from labmon.demo.station import DemoStation
from labmon.demo.world import World
from tests.running_lab import free_port

pytestmark = pytest.mark.django_db(transaction=True)


@pytest.fixture
def address():
    port = free_port()
    config = uvicorn.Config(DoorApplication(), host="127.0.0.1", port=port, log_config=None, ws="none", lifespan="on")
    server = uvicorn.Server(config)
    thread = threading.Thread(target=server.run)
    thread.start()
    while not server.started:
        time.sleep(0.01)
    yield f"http://127.0.0.1:{port}/"
    server.should_exit = True
    thread.join()


class AnswerLost:
    """A way to the door on which the answer to some batches gets lost after they were stored."""

    def __init__(self, door, lost):
        self.door, self.lost, self.count = door, lost, 0

    def send(self, batch):
        answer = self.door.send(batch)
        self.count += 1
        if self.count in self.lost:
            raise NoAnswer("the answer was lost")
        return answer


def _station(name, address, lost=(), **more):
    bench = bench_named(name)
    station, key = add_station(bench.station, bench.room, [NewTap(bench.tap, "two-port", bench.head.unit)])
    started_us = now_us() - 60_000_000
    sender = DemoStation(name=bench.station, tap=bench.tap, door=AnswerLost(Door(address, key), lost), firmware=bench.firmware,
                         started_us=started_us, spool=Spool(1000), say=lambda text: None, **more)
    return bench, station.taps.get(), sender


def _take(sender, bench, world, first, count):
    at_s = moment(15, 1) + first + np.arange(count)
    sender.take(sender.started_us + (first + np.arange(count)) * 1_000_000, world.readings(bench, at_s))
    return world.readings(bench, at_s)


def test_readings_arrive_once_each_though_answers_get_lost(address):
    bench, tap, sender = _station("N2", address, lost={1, 2, 4})
    world, sent = World(16), []
    for first in range(0, 50, 10):
        sent.append(_take(sender, bench, world, first, 10))
        sender.next_try_us = 0
        sender.try_to_send(now_us())
    sender.next_try_us = 0
    sender.try_to_send(now_us())
    sender.door.door.close()
    assert not sender.spool.waiting
    readings = read_readings(tap.pk, sender.started_us - 1, now_us() + 1)
    np.testing.assert_array_equal(readings.sequence, np.arange(50))
    for name in ("port1", "port2", "port2_min", "port2_max"):
        np.testing.assert_allclose(readings.columns[name], np.concatenate([part[name] for part in sent]), rtol=1e-12)
    assert not readings.is_server_timed.any()


def test_the_clock_of_v1_is_found_out(address):
    bench, tap, sender = _station("V1", address, clock_ahead_s=420.0)
    _take(sender, bench, World(16), 50, 5)
    sender.try_to_send(now_us())
    sender.door.door.close()
    boot = StationBoot.objects.get(station=tap.station)
    assert boot.is_server_timed
    assert boot.clock_fault
    readings = read_readings(tap.pk, now_us() - 120_000_000, now_us() + 1_000_000)
    assert len(readings) == 5
    true_us = sender.started_us + (50 + np.arange(5)) * 1_000_000
    np.testing.assert_allclose(readings.at_us, true_us, atol=1_000_000)
    np.testing.assert_array_equal(readings.own_at_us, true_us + 420_000_000)


def test_a_revoked_key_locks_the_station_out(address):
    bench, tap, sender = _station("N4", address)
    Tap.objects.get(pk=tap.pk).station.keys.all().delete()
    _take(sender, bench, World(16), 0, 3)
    sender.try_to_send(now_us())
    sender.door.door.close()
    assert sender.is_locked_out
    assert len(sender.spool.waiting) == 3
