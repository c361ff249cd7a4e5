"""Readings set aside: kept as they came, never mixed in."""

import hashlib
import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import msgspec

_NUL = re.compile(rb"(?<!\\)((?:\\\\)*)\\u0000")


@dataclass(frozen=True, slots=True)
class Aside:
    """One reading that could not be used, with the reason and the remedy."""

    tap_id: int
    tap: str
    row: int
    """Its place in the columns as sent, from 0."""
    field: str
    why: str
    do: str
    boot: str
    sequence: int | None
    reading: bytes
    """The reading as JSON, non-finite numbers as text."""

    def digest(self) -> bytes:
        """Of identity and content: the same reading sent again is not listed twice."""
        identity = f"{self.tap}\0{self.boot}\0{self.sequence}\0".encode()
        return hashlib.blake2b(identity + self.reading, digest_size=16).digest()

    def as_json(self) -> dict[str, Any]:
        """As the door answers it."""
        return {"tap": self.tap, "row": self.row, "field": self.field, "why": self.why, "do": self.do}


def reading_json(reading: Mapping[str, Any]) -> bytes:
    """A reading as JSON that PostgreSQL can keep: non-finite numbers as text, no NUL, whatever a station sent."""
    plain = {name: _plain(value) for name, value in reading.items()}
    try:
        text = msgspec.json.encode(plain)
    except (TypeError, ValueError, OverflowError, RecursionError):
        text = msgspec.json.encode({name: repr(value)[:1000].encode("ascii", "backslashreplace").decode()
                                    for name, value in plain.items()})
    return _NUL.sub(rb"\1\\ufffd", text)


def _plain(value: Any) -> Any:
    if isinstance(value, float) and not math.isfinite(value):
        return "NaN" if math.isnan(value) else ("Infinity" if value > 0 else "-Infinity")
    return value
