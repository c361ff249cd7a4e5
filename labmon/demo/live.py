"""Live sending: every bench and every room's climate sensor, each in a thread of its own, through the HTTP door."""

import threading
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from ingest.times import now_us
from labmon.demo.air import ROOMS, RoomPlan
from labmon.demo.benches import BENCHES, BenchPlan
from labmon.demo.door import Door
from labmon.demo.excursions import live_excursions
from labmon.demo.folder import DemoNotes
from labmon.demo.ledger import LEDGER
from labmon.demo.lives import ahead_at, lives_of, reading_times
from labmon.demo.moments import DAY_S
from labmon.demo.ports import Columns
from labmon.demo.spool import Spool
from labmon.demo.station import DemoStation, Say
from labmon.demo.world import World

FloatArray = NDArray[np.float64]
LIVE_CADENCE_S = 1.0
CLIMATE_CADENCE_S = 10.0
CLIMATE_TAP = "air"
CLIMATE_FIRMWARE = "room sensor 1.0"
PIECE_S = 300.0
LOOK_EVERY_S = 0.2
MOST_HELD = 50_000


@dataclass(slots=True)
class SharedWorld:
    """One simulated world for all threads; it grows by days as time passes."""

    seed: int
    start_s: float
    lock: threading.Lock = field(default_factory=threading.Lock)
    world: World | None = None

    def reaching(self, until_s: float) -> World:
        """A world that covers ``until_s``."""
        with self.lock:
            if self.world is None or not self.world.covers(until_s):
                ledger = LEDGER.with_rows(live_excursions(self.start_s))
                self.world = World(int(until_s // DAY_S) + 2, self.seed, ledger)
            return self.world


@dataclass(slots=True)
class Instrument:
    """Hands out a station's readings as time passes, computed a few minutes ahead."""

    times: Callable[[float, float], FloatArray]
    columns: Callable[[FloatArray], Columns]
    taken_until_s: float
    at_s: FloatArray = field(default_factory=lambda: np.empty(0))
    values: Columns = field(default_factory=dict)
    known_until_s: float = 0.0

    def until(self, now_s: float) -> tuple[FloatArray, Columns]:
        """Readings made since the last call up to ``now_s``."""
        self.known_until_s = max(self.known_until_s, self.taken_until_s)
        at_parts, value_parts = [], []
        while self.taken_until_s < now_s:
            if self.taken_until_s >= self.known_until_s:
                self.at_s = self.times(self.known_until_s, self.known_until_s + PIECE_S)
                self.values = self.columns(self.at_s)
                self.known_until_s += PIECE_S
            stop_s = min(now_s, self.known_until_s)
            new = (self.at_s >= self.taken_until_s) & (self.at_s < stop_s)
            at_parts.append(self.at_s[new])
            value_parts.append({name: column[new] for name, column in self.values.items()})
            self.taken_until_s = stop_s
        if not at_parts:
            return np.empty(0), {}
        return np.concatenate(at_parts), {name: np.concatenate([part[name] for part in value_parts]) for name in value_parts[0]}


def run_live(notes: DemoNotes, address: str, stop: threading.Event, say: Say) -> None:
    """Send until ``stop``; returns when all threads have ended."""
    started_us = now_us()
    start_s = float(np.ceil((started_us - notes.day_one_us) / 1e6))
    shared = SharedWorld(notes.seed, start_s)
    runs = [(_bench_station(bench, notes, address, started_us, start_s, say), _bench_instrument(bench, shared, start_s))
            for bench in BENCHES]
    runs += [(_room_station(room, notes, address, started_us, say), _room_instrument(room, shared, start_s)) for room in ROOMS]
    threads = [threading.Thread(target=_send_on, args=[station, instrument, notes.day_one_us, stop], name=station.name)
               for station, instrument in runs]
    for thread in threads:
        thread.start()
    say(f"{len(BENCHES)} benches and {len(ROOMS)} room sensors send to {address}")
    for thread in threads:
        thread.join()


def _send_on(station: DemoStation, instrument: Instrument, day_one_us: int, stop: threading.Event) -> None:
    while not stop.wait(LOOK_EVERY_S):
        moment_us = now_us()
        at_s, columns = instrument.until((moment_us - day_one_us) / 1e6)
        if len(at_s):
            station.take(day_one_us + np.round(at_s * 1e6).astype(np.int64), columns)
        station.try_to_send(now_us())


def _bench_station(bench: BenchPlan, notes: DemoNotes, address: str, started_us: int, start_s: float, say: Say) -> DemoStation:
    held = MOST_HELD if np.isinf(bench.buffer_s) else max(int(bench.buffer_s), 5)
    return DemoStation(name=bench.station, tap=bench.tap, door=Door(address, notes.station_keys[bench.station]),
                       firmware=lives_of(bench, start_s, LEDGER, notes.seed)[-1].firmware, started_us=started_us,
                       spool=Spool(held), say=say, clock_ahead_s=ahead_at(bench, start_s, LEDGER))


def _room_station(room: RoomPlan, notes: DemoNotes, address: str, started_us: int, say: Say) -> DemoStation:
    return DemoStation(name=room.station, tap=CLIMATE_TAP, door=Door(address, notes.station_keys[room.station]),
                       firmware=CLIMATE_FIRMWARE, started_us=started_us, spool=Spool(MOST_HELD), say=say)


def _bench_instrument(bench: BenchPlan, shared: SharedWorld, start_s: float) -> Instrument:
    return Instrument(times=lambda first_s, last_s: reading_times(bench, first_s, last_s, LIVE_CADENCE_S, shared.seed),
                      columns=lambda at_s: shared.reaching(at_s[-1] + PIECE_S).readings(bench, at_s), taken_until_s=start_s)


def _room_instrument(room: RoomPlan, shared: SharedWorld, start_s: float) -> Instrument:
    return Instrument(times=lambda first_s, last_s: np.arange(np.ceil(first_s / CLIMATE_CADENCE_S) * CLIMATE_CADENCE_S, last_s,
                                                              CLIMATE_CADENCE_S),
                      columns=lambda at_s: shared.reaching(at_s[-1] + PIECE_S).climate(room.name, at_s), taken_until_s=start_s)
