"""A Python function of the user's as a source."""

from __future__ import annotations

import importlib.util
import math
from collections.abc import Callable, Mapping
from typing import Any

from labmon_bench.clock import now_us, uptime_ms
from labmon_bench.reading import Reading
from labmon_bench.settings import FunctionSettings
from labmon_bench.source import SourceFault
from labmon_bench.spool import Place


class FunctionSource:
    """Calls ``name()`` of a file; it returns a map from column to number, or None where there is no reading now."""

    is_awaited = False

    def __init__(self, tap: str, settings: FunctionSettings) -> None:
        self.tap, self.settings = tap, settings
        self._function: Callable[[], Any] | None = None

    def read(self) -> tuple[list[Reading], Place | None]:
        """Call it once; the reading's time is the middle of the call."""
        place = f"{self.settings.file.name}:{self.settings.name}"
        try:
            if self._function is None:
                self._function = self._loaded()
            begun_us, begun_ms = now_us(), uptime_ms()
            found = self._function()
            taken_ms = uptime_ms() - begun_ms
        except SourceFault:
            raise
        except Exception as error:
            raise SourceFault(f"{place} failed with {error!r}; correct the function, and let it return None where there is no "
                              "reading") from error
        if found is None:
            return [], None
        if not isinstance(found, Mapping) or not found:
            raise SourceFault(f"{place} returned {str(found)[:80]!r}; let it return a map such as "
                              "{'port1': 1e-3, 'port2': 1e-6}")
        values = {str(name): _checked_number(place, name, value) for name, value in found.items()}
        return [Reading(self.tap, begun_us + 500 * taken_ms, begun_ms + taken_ms // 2, values)], None

    def kept(self) -> None:
        """A call cannot be made again."""

    def close(self) -> None:
        """Load the file anew at the next reading, so that a correction needs no restart."""
        self._function = None

    def _loaded(self) -> Callable[[], Any]:
        file, name = self.settings.file, self.settings.name
        spec = importlib.util.spec_from_file_location(f"bench_source_{file.stem}", file)
        if not file.is_file() or spec is None or spec.loader is None:
            raise SourceFault(f"{file} is not there or no Python file; correct function")
        module = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(module)
        found = getattr(module, name, None)
        if not callable(found):
            raise SourceFault(f"{file.name} has no function {name}; correct function")
        made: Callable[[], Any] = found
        return made


def _checked_number(place: str, name: object, value: Any) -> float | None:
    if value is None:
        return None
    try:
        number = float(value)
    except (TypeError, ValueError) as error:
        raise SourceFault(f"{place} returned {str(value)[:80]!r} for {name}; return a number, or None") from error
    return number if math.isfinite(number) else None
