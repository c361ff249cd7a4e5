"""The source that a tap's settings ask for, read at its times by a thread of its own."""

from __future__ import annotations

import logging
import random
import threading
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from labmon_bench.clock import now_us
from labmon_bench.csv_file import CsvFile
from labmon_bench.function import FunctionSource
from labmon_bench.instrument import Instrument
from labmon_bench.lines import SerialLines, StandardInput
from labmon_bench.reading import Reading
from labmon_bench.settings import CsvSettings, FunctionSettings, InstrumentSettings, SerialSettings, TapSettings
from labmon_bench.source import OddLine, Source, SourceEnded, SourceFault
from labmon_bench.spool import Place
from labmon_bench.store import Store, StoreFault

log = logging.getLogger("labmon_bench")

LONGEST_PAUSE_S = 30.0
_AT_ONCE_S = 1e-6
_SAY_AGAIN_S = 600.0


def source_of(tap: TapSettings, store: Store) -> Source:
    """The source, not yet opened."""
    settings = tap.source
    if isinstance(settings, InstrumentSettings):
        return Instrument(tap.tap, settings)
    if isinstance(settings, SerialSettings):
        return SerialLines(tap.tap, settings)
    if isinstance(settings, CsvSettings):
        return CsvFile(tap.tap, settings, store)
    if isinstance(settings, FunctionSettings):
        return FunctionSource(tap.tap, settings)
    return StandardInput(tap.tap, settings)


@dataclass
class SourceState:
    """How a source does."""

    tap: str
    readings: int = 0
    odd_lines: int = 0
    mute_since_us: int | None = None
    trouble: str = ""
    is_ended: bool = False


class Reader:
    """Reads one source until told to stop.

    Args:
        keep: Keeps readings; raises StoreFault where it cannot.
        mains_hz: The instants of reading are spread over one cycle of the mains by chance, so that its hum does not show as
            a slow wave; 0 for none.
    """

    def __init__(self, tap: TapSettings, source: Source, keep: Callable[[Sequence[Reading], Place | None], None], *,
                 mains_hz: float, seed: int | None = None) -> None:
        self.tap, self.source, self.keep = tap, source, keep
        self.state = SourceState(tap.tap)
        self.cycle_s = 1.0 / mains_hz if mains_hz else 0.0
        self._random = random.Random(seed)
        self._failures = 0
        self._said: dict[str, float] = {}

    def run(self, stop: threading.Event) -> None:
        """Read at the set times, or as things come."""
        due_s = time.monotonic()
        while not stop.is_set() and not self.state.is_ended:
            pause_s = self.turn()
            if pause_s:
                stop.wait(pause_s)
            elif not self.source.is_awaited:
                late = max(0.0, time.monotonic() - due_s) // self.tap.read_every_s
                due_s += self.tap.read_every_s * (1 + late)
                shift_s = self._random.uniform(0.0, min(self.cycle_s, self.tap.read_every_s))
                stop.wait(max(0.0, due_s + shift_s - time.monotonic()))
        self.source.close()

    def turn(self) -> float:
        """Read once; seconds to pause beyond the usual."""
        try:
            readings, place = self.source.read()
            self._keep(readings, place)
            if place is not None:
                return _AT_ONCE_S  # there may be more of it
        except OddLine as fault:
            self.state.odd_lines += 1
            self._say("odd", str(fault))
            return 0.0
        except SourceFault as fault:
            self.source.close()
            return self._mute(str(fault))
        except StoreFault as fault:
            self._say("store", str(fault))
            return min(5.0, self.tap.read_every_s)
        except SourceEnded as end:
            log.warning("tap %s: %s", self.tap.tap, end)
            self.state.is_ended = True
        return 0.0

    def _keep(self, readings: Sequence[Reading], place: Place | None) -> None:
        if readings or place is not None:
            self.keep(readings, place)
            self.source.kept()
        if readings:
            self.state.readings += len(readings)
            if self.state.mute_since_us is not None:
                log.warning("tap %s: readings come again", self.tap.tap)
            self._failures, self.state.mute_since_us, self.state.trouble = 0, None, ""

    def _mute(self, why: str) -> float:
        """The client is alive, the source mute: say so, and try again after a longer and longer pause."""
        self._failures += 1
        if self.state.mute_since_us is None:
            self.state.mute_since_us = now_us()
        self.state.trouble = why
        self._say("mute", why)
        return min(LONGEST_PAUSE_S, 2.0 ** min(self._failures - 1, 10)) * self._random.uniform(0.5, 1.0)

    def _say(self, kind: str, words: str) -> None:
        """In the log at once, and every ten minutes while it lasts."""
        is_due = time.monotonic() - self._said.get(kind, -_SAY_AGAIN_S) >= _SAY_AGAIN_S
        if is_due or (kind == "mute" and self._failures in (1, 3)):
            self._said[kind] = time.monotonic()
            log.error("tap %s: %s", self.tap.tap, words)
