"""One reading as a source gives it: raw numbers by column name, and when they were measured."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from labmon_bench.clock import now_us, uptime_ms

NO_NUMBER = 9.9e37
"""SCPI-1999, vol. 1, 7.2.1: 9.9e37 stands for infinity and 9.91e37 for "not a number" (from memory)."""
_BETWEEN = re.compile(r"[,;\s]+")


@dataclass(frozen=True)
class Reading:
    """Raw values of one tap at one instant.

    Attributes:
        tap: Short name of the tap.
        at_us: Wall time, microseconds since 1970, as the PC's clock (or the file) has it.
        uptime_ms: Time since the PC's power-up, ms; None for a time that came with the line.
        values: Raw number by column name, in the tap's unit; None where the source gave none.
        more: Columns that the door keeps as they come (health of the client).
    """

    tap: str
    at_us: int
    uptime_ms: int | None
    values: Mapping[str, float | None]
    more: Mapping[str, Any] = field(default_factory=dict)


def reading_now(tap: str, values: Mapping[str, float | None]) -> Reading:
    """A reading measured at this moment."""
    return Reading(tap, now_us(), uptime_ms(), values)


def number_of(text: str, decimal: str = ".") -> float | None:
    """The number that a text says; None where it says there is none (empty, nan, infinite, SCPI's marks).

    Raises:
        ValueError: It is no number.
    """
    text = text.strip().strip('"').strip()
    if not text:
        return None
    if decimal != ".":
        if "." in text:
            raise ValueError(f"{text!r} has a point, though decimal = {decimal}")
        text = text.replace(decimal, ".")
    if "_" in text:
        raise ValueError(f"{text!r} is no number")
    number = float(text)
    return number if math.isfinite(number) and abs(number) < NO_NUMBER else None


def values_of_line(line: str, columns: Sequence[str]) -> dict[str, float | None]:
    """The numbers of a line such as ``0.998, 0.0011`` by column; ``-`` as a column's name leaves its number out.

    Raises:
        ValueError: Not one number for each column.
    """
    parts = [part for part in _BETWEEN.split(line.strip()) if part]
    if len(parts) != len(columns):
        raise ValueError(f"{line.strip()[:80]!r} has {len(parts)} numbers, not {len(columns)} ({' '.join(columns)})")
    try:
        return {name: number_of(part) for name, part in zip(columns, parts) if name != "-"}
    except ValueError as error:
        raise ValueError(f"{line.strip()[:80]!r} is no line of numbers") from error
