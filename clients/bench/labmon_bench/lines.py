"""Lines of numbers as they come: from a board on a serial port, or from another program."""

from __future__ import annotations

import sys
from collections.abc import Callable
from typing import IO, Any

from labmon_bench.reading import Reading, reading_now, values_of_line
from labmon_bench.settings import SerialSettings, StdinSettings
from labmon_bench.source import OddLine, SourceEnded, SourceFault
from labmon_bench.spool import Place

_LONGEST_LINE = 10_000
_PATIENCE_S = 1.0


class SerialLines:
    """A board that writes a line of numbers for each reading."""

    is_awaited = True

    def __init__(self, tap: str, settings: SerialSettings) -> None:
        self.tap, self.settings = tap, settings
        self._port: Any = None
        self._part = b""
        self._is_whole = False

    def read(self) -> tuple[list[Reading], Place | None]:
        """The next line, or nothing within a second. What stands before the first line end may be cut and is left out."""
        try:
            if self._port is None:
                self._port, self._part, self._is_whole = self._opened(), b"", False
            self._part += self._port.readline()
        except OSError as error:  # pyserial's SerialException is one
            self.close()
            raise SourceFault(f"serial port {self.settings.port} gives nothing ({error}); is the board plugged in, and does no "
                              "other program use the port?") from error
        if not self._part.endswith(b"\n"):
            self._part = self._part[-_LONGEST_LINE:]
            return [], None
        line, self._part = self._part, b""
        was_whole, self._is_whole = self._is_whole, True
        return ([self._reading(line)] if was_whole else []), None

    def kept(self) -> None:
        """A line cannot be read again."""

    def close(self) -> None:
        """Leave the port."""
        if self._port is not None:
            self._port.close()
            self._port = None

    def _opened(self) -> Any:
        try:
            import serial
        except ImportError as error:
            raise SourceFault("pyserial is not installed; run: pip install pyserial") from error
        return serial.Serial(self.settings.port, self.settings.baud, timeout=_PATIENCE_S)

    def _reading(self, line: bytes) -> Reading:
        return _reading(self.tap, line.decode("ascii", "replace"), self.settings.columns)


class StandardInput:
    """Another program's lines: ``measure | labmon-bench run bench.ini``."""

    is_awaited = True

    def __init__(self, tap: str, settings: StdinSettings, stream: IO[str] | None = None) -> None:
        self.tap, self.settings = tap, settings
        self._next_line: Callable[[], str] = (stream or sys.stdin).readline

    def read(self) -> tuple[list[Reading], Place | None]:
        """The next line; waits for it."""
        line = self._next_line()
        if not line:
            raise SourceEnded("standard input has ended")
        return [_reading(self.tap, line, self.settings.columns)], None

    def kept(self) -> None:
        """A line cannot be read again."""

    def close(self) -> None:
        """The stream is not ours."""


def _reading(tap: str, line: str, columns: tuple[str, ...]) -> Reading:
    try:
        return reading_now(tap, values_of_line(line, columns))
    except ValueError as error:
        raise OddLine(f"{error}; correct columns, or what is written ( - leaves a number out)") from error
