"""Taking typed entries out of a table of rules, gathering every fault with its key, value and remedy."""

import math
from collections.abc import Mapping as AnyMapping
from collections.abc import Sequence
from datetime import date, datetime
from typing import Any

from ingest.files.faults import MappingFault

TEXT_LIMIT = 200


class Rules:
    """One table; sub-tables share its list of faults. ``end`` reports the entries nobody asked for."""

    def __init__(self, entries: AnyMapping[str, Any], path: str = "", faults: list[MappingFault] | None = None) -> None:
        self._entries = dict(entries)
        self._path = path
        self._asked: list[str] = []
        self.faults: list[MappingFault] = [] if faults is None else faults

    def fault(self, key: str, value: object, why: str, do: str) -> None:
        path = ".".join(part for part in (self._path, key) if part) or "mapping"
        self.faults.append(MappingFault(path, value, why, do))

    def names(self) -> list[str]:
        return list(self._entries)

    def take(self, key: str) -> Any:
        self._asked.append(key)
        return self._entries.get(key)

    def has(self, key: str) -> bool:
        return key in self._entries

    def table(self, key: str, *, required: bool = True) -> "Rules":
        entries = self.take(key)
        if entries is None and required:
            self.fault(key, None, "the table is missing", f"add a part that starts with [{key}]")
        elif entries is not None and not isinstance(entries, AnyMapping):
            self.fault(key, entries, "is not a table", f"write a part that starts with [{key}]")
        return Rules(entries if isinstance(entries, AnyMapping) else {}, key, self.faults)

    def sub(self, key: str) -> "Rules":
        """A column's entry: a table, or only the name or number of the file's column."""
        entries = self.take(key)
        if not isinstance(entries, AnyMapping):
            entries = {"column": entries}
        return Rules(entries, f"{self._path}.{key}", self.faults)

    def text(self, key: str, *, default: str) -> str:
        value = self.take(key)
        if value is None:
            return default
        if not isinstance(value, str) or len(value) > TEXT_LIMIT or "\0" in value:
            self.fault(key, value, "is not a short text", "write it in quotation marks")
            return default
        return value

    def instant_text(self, key: str) -> str:
        """A date and time, written as a TOML date or as text; as ISO text, empty where absent."""
        value = self.take(key)
        if isinstance(value, (datetime, date)):
            return value.isoformat()
        self._entries[key] = value
        return self.text(key, default="").strip()

    def choice(self, key: str, options: Sequence[str], *, default: str) -> str:
        value = self.text(key, default=default)
        if value not in options:
            self.fault(key, value, "is not one of the possible words", f"use {', '.join(options)}")
            return default
        return value

    def whole(self, key: str, *, default: int) -> int:
        value = self.take(key)
        if value is None:
            return default
        if isinstance(value, bool) or not isinstance(value, int) or not 0 <= value <= 100_000:
            self.fault(key, value, "is not a number of lines", "write a whole number from 0 to 100000")
            return default
        return value

    def number(self, key: str, *, default: float) -> float:
        value = self.take(key)
        if value is None:
            return default
        if isinstance(value, bool) or not isinstance(value, (int, float)) or abs(value) > 1e300 or not math.isfinite(value):
            self.fault(key, value, "is not a finite number", "write a number with a decimal point")
            return default
        return float(value)

    def truth(self, key: str, *, default: bool) -> bool:
        value = self.take(key)
        if value is None:
            return default
        if not isinstance(value, bool):
            self.fault(key, value, "is neither true nor false", "write true or false")
            return default
        return value

    def texts(self, key: str, *, default: list[str]) -> list[str]:
        value = self.take(key)
        if value is None:
            return default
        listed = [value] if isinstance(value, str) else value
        if not isinstance(listed, list) or not all(isinstance(text, str) and len(text) <= TEXT_LIMIT for text in listed):
            self.fault(key, value, "is not a list of texts", 'write for instance ["-99.99", "n/a"]')
            return default
        return listed

    def column(self, key: str) -> str | int:
        value = self.take(key)
        if not _is_column(value):
            self.fault(key, value, "is not a column of the file", "write its name from the header line, or its number from 1")
            return ""
        return value.strip() if isinstance(value, str) else value

    def columns(self, key: str, single: str) -> tuple[str | int, ...]:
        """A list of columns under ``key``, or one under ``single``."""
        if self.has(single) and self.has(key):
            self.fault(key, self.take(key), f"stands beside {single}", "write only one of the two")
        if self.has(single):
            return (self.column(single),)
        value = self.take(key)
        if not isinstance(value, list) or not value or len(value) > 8 or not all(_is_column(part) for part in value):
            self.fault(single if value is None else key, value, "no column is named",
                       'write column = "Time", or columns = ["Date", "Time"]')
            return ()
        return tuple(part.strip() if isinstance(part, str) else part for part in value)

    def end(self) -> None:
        for key in self._entries:
            if key not in self._asked:
                self.fault(key, self._entries[key], "nobody knows this entry", f"use {', '.join(self._asked)}")


def _is_column(value: Any) -> bool:
    if isinstance(value, str):
        return 0 < len(value.strip()) <= TEXT_LIMIT
    return isinstance(value, int) and not isinstance(value, bool) and 1 <= value <= 10_000
