"""The client at work: one thread a source, one that sends, and a look at all of them every few seconds."""

from __future__ import annotations

import logging
import threading
from collections.abc import Sequence

from labmon_bench.door import Door
from labmon_bench.health import Health, status_path, write_status
from labmon_bench.reading import Reading
from labmon_bench.sender import Sender
from labmon_bench.settings import BenchSettings, station_key
from labmon_bench.source import Source
from labmon_bench.sources import Reader, source_of
from labmon_bench.spool import Place
from labmon_bench.store import Store
from labmon_bench.version import FIRMWARE

log = logging.getLogger("labmon_bench")

_LOOK_EVERY_S = 0.5
_STATUS_EVERY = 10
"""Looks between two writings of the status file."""
_STOP_WITHIN_S = 5.0


class Bench:
    """Everything that one settings file asks for.

    Raises:
        SettingsFault: The spool cannot be used.
    """

    def __init__(self, settings: BenchSettings) -> None:
        self.settings = settings
        self.store = Store(settings.spool, int(settings.spool_mb * 2**20))
        door = Door(settings.door, settings.ca_file, settings.timeout_s)
        self.sender = Sender(self.store, door, lambda: station_key(settings), settings.send_every_s,
                             told=lambda: self.health.told())
        sources: list[Source] = [source_of(tap, self.store) for tap in settings.taps]
        self.readers = [Reader(tap, source, self.keep, mains_hz=settings.mains_hz) for tap, source in zip(settings.taps, sources)]
        self.health = Health(self.store, self.sender.tally, [reader.state for reader in self.readers],
                             is_told=settings.is_health_reported)

    def keep(self, readings: Sequence[Reading], place: Place | None) -> None:
        """Keep what a source gave."""
        self.store.keep(readings, place)

    def run(self, stop: threading.Event) -> None:
        """Work until told to stop, or until every source is over and everything is acknowledged."""
        log.info("%s starts: boot %s, start number %d, %d readings wait", FIRMWARE, self.store.boot.name, self.store.starts,
                 self.store.waiting)
        runs = [self.sender.run, *(reader.run for reader in self.readers)]
        threads = [threading.Thread(target=run, args=(stop,), daemon=True) for run in runs]
        for thread in threads:
            thread.start()
        status = status_path(self.settings.spool)
        looks = 0
        while not stop.wait(_LOOK_EVERY_S):
            looks += 1
            if looks % _STATUS_EVERY == 1:
                write_status(status, self.health.status())
            if dead := [thread for thread in threads if not thread.is_alive() and not self._is_over()]:
                if len(dead) > sum(reader.state.is_ended for reader in self.readers):
                    raise RuntimeError("a part of the client has died; see the lines above")
            if self._is_over() and not self.store.waiting:
                stop.set()
        for thread in threads:
            thread.join(_STOP_WITHIN_S)
        self.sender.finish()
        write_status(status, self.health.status())
        self.store.close()
        log.info("stopped; %d readings wait in the spool", self.store.waiting)

    def _is_over(self) -> bool:
        return all(reader.state.is_ended for reader in self.readers)
