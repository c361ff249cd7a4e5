"""An instrument that answers SCPI queries, over LAN, USB, GPIB or serial, through PyVISA."""

from __future__ import annotations

import contextlib
import threading
from typing import Any

from labmon_bench.clock import now_us, uptime_ms
from labmon_bench.reading import Reading, number_of
from labmon_bench.settings import InstrumentSettings
from labmon_bench.source import SourceFault
from labmon_bench.spool import Place

IDENTIFY = "*IDN?"


class Link:
    """One open instrument; two taps of one instrument share it."""

    _shared: dict[tuple[str, str], Link] = {}

    def __init__(self, settings: InstrumentSettings) -> None:
        self.settings = settings
        self.lock = threading.Lock()
        self.identity = ""
        self._resource: Any = None
        self._faults = 0

    @classmethod
    def to(cls, settings: InstrumentSettings) -> Link:
        """The link to an address."""
        return cls._shared.setdefault((settings.backend, settings.address), Link(settings))

    def ask(self, query: str) -> str:
        """One answer.

        Raises:
            SourceFault: None came. The link is cleared and closed, since a late answer would be taken for that of the next query.
        """
        try:
            if self._resource is None:
                self._open()
            answer = str(self._resource.query(query)).strip()
        except SourceFault:
            raise
        except Exception as error:
            self._faults += 1
            self.close()
            raise SourceFault(self._words(query, error)) from error
        self._faults = 0
        return answer

    def close(self) -> None:
        """Clear and close; the next query opens again."""
        resource, self._resource = self._resource, None
        if resource is not None:
            for step in (resource.clear, resource.close):
                with contextlib.suppress(Exception):
                    step()

    def _open(self) -> None:
        try:
            import pyvisa
        except ImportError as error:
            raise SourceFault("PyVISA is not installed; run: pip install pyvisa pyvisa-py (and pyusb for USB, pyserial for "
                              "serial ports)") from error
        settings = self.settings
        options: dict[str, Any] = {"read_termination": settings.ending, "write_termination": settings.ending}
        if settings.address.upper().startswith("ASRL"):
            options["baud_rate"] = settings.baud
        resource = pyvisa.ResourceManager(settings.backend).open_resource(settings.address, **options)
        self._resource = resource
        resource.timeout = 1000.0 * settings.timeout_s
        with contextlib.suppress(Exception):
            resource.clear()  # not every kind of link has a device clear
        for command in settings.at_open:
            resource.write(command)
        self.identity = str(resource.query(IDENTIFY)).strip()
        if settings.expect not in self.identity:
            self.close()
            raise SourceFault(f"{settings.address} says it is {self.identity!r}, not {settings.expect!r}; exchange the "
                              "addresses, or correct expect")

    def _words(self, query: str, error: Exception) -> str:
        what = str(error).splitlines()[0] if str(error) else type(error).__name__
        words = f"{self.settings.address} is mute: no answer to {query} ({what}); it is opened anew at the next reading"
        if self._faults >= 3:
            return f"{words}. It failed {self._faults} times running: look at its cable and address, then switch it off and on"
        return words


class Instrument:
    """One tap's queries."""

    is_awaited = False

    def __init__(self, tap: str, settings: InstrumentSettings) -> None:
        self.tap, self.settings, self.link = tap, settings, Link.to(settings)

    def read(self) -> tuple[list[Reading], Place | None]:
        """Ask every query once; the reading's time is the middle of the asking."""
        values: dict[str, float | None] = {}
        with self.link.lock:
            begun_us, begun_ms = now_us(), uptime_ms()
            answers = [self.link.ask(ask.query) for ask in self.settings.ask]
            taken_ms = uptime_ms() - begun_ms
        for ask, answer in zip(self.settings.ask, answers):
            values.update(self._numbers(ask.query, answer, ask.columns))
        return [Reading(self.tap, begun_us + 500 * taken_ms, begun_ms + taken_ms // 2, values)], None

    def kept(self) -> None:
        """An instrument cannot be read again."""

    def close(self) -> None:
        """Leave the instrument."""
        with self.link.lock:
            self.link.close()

    def _numbers(self, query: str, answer: str, columns: tuple[str, ...]) -> dict[str, float | None]:
        parts = answer.replace(";", ",").split(",")
        try:
            if len(parts) != len(columns):
                raise ValueError(f"{len(parts)} values")
            return {name: number_of(part) for name, part in zip(columns, parts) if name != "-"}
        except ValueError as error:
            raise SourceFault(f"{self.settings.address} answered {answer[:80]!r} to {query}, which is not one number for each of "
                              f"{' '.join(columns)} ({error}); correct ask ( - leaves a number out)") from error
