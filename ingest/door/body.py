"""A checked body: what the door knows of its readings before they are stored."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from ingest.aside import Aside, reading_json
from ingest.clocks import NO_UPTIME, Sending
from ingest.door.columns import words_of
from ingest.store.columns import FloatArray, IntArray, ObjectArray

GREATEST_SEQUENCE = (1 << 63) - 2


@dataclass(frozen=True, slots=True)
class KnownTap:
    """A tap as the door knows it."""

    id: int
    name: str
    kind: str
    unit: str
    is_float32: bool = False


@dataclass(frozen=True, slots=True)
class KnownStation:
    """A station as the door knows it."""

    id: int
    name: str
    taps: Mapping[str, KnownTap]


@dataclass(slots=True)
class Part:
    """One tap's readings of a body; arrays hold the usable ones, in the order sent."""

    tap: KnownTap
    sent: Mapping[str, Any]
    """The columns as they came."""
    count: int
    """Readings sent."""
    rows: IntArray | None
    """Places of the usable ones in the columns, shape (N,); None where all are usable."""
    names: tuple[str, ...]
    values: FloatArray
    """Shape (columns, N)."""
    numbers: IntArray | None
    """Sequence of each, NO_SEQUENCE where none, shape (N,); None where ``steps_from`` says it all."""
    steps_from: int | None
    """First number, where the usable ones are numbered without a hole and in order."""
    own_at_us: IntArray
    uptime_ms: IntArray | None
    """None where no reading has one."""
    unknown: ObjectArray | None
    unknown_names: tuple[str, ...]
    aside: list[Aside]
    aside_sequences: list[int]

    def __len__(self) -> int:
        """Usable readings."""
        return len(self.own_at_us)

    @property
    def sequence(self) -> IntArray:
        """Number of each reading, NO_SEQUENCE where none, shape (N,)."""
        if self.numbers is None:
            assert self.steps_from is not None
            self.numbers = np.arange(self.steps_from, self.steps_from + len(self), dtype=np.int64)
        return self.numbers

    def uptimes(self) -> IntArray:
        """Uptimes as sent, NO_UPTIME where none, shape (N,)."""
        return np.full(len(self), NO_UPTIME, np.int64) if self.uptime_ms is None else self.uptime_ms

    def element(self, name: str, row: int) -> Any:
        """One value as it came; of a binary column the number."""
        column = self.sent[name]
        return words_of(column, name, self.tap.unit)[row].item() if isinstance(column, bytes) else column[row]

    def aside_of(self, row: int, boot: str, fault: tuple[str, str, str]) -> Aside:
        """One reading of the part, set aside for (field, why, do)."""
        reading = {name: self.element(name, row) for name in self.sent}
        sequence = reading.get("sequence")
        is_number = type(sequence) is int and 0 <= sequence <= GREATEST_SEQUENCE
        return Aside(self.tap.id, self.tap.name, row, *fault, boot, sequence if is_number else None, reading_json(reading))


@dataclass(slots=True)
class Body:
    """One checked body."""

    station: KnownStation
    boot: str
    firmware: str
    sending: Sending
    parts: list[Part]
    own_at_us: IntArray
    """Stamps of the usable readings of all parts, one after the other; NO_TIME where none."""
    is_stamped: bool
    """Every usable reading has a stamp of the station's own."""
    count: int
    """Readings sent."""
    remote_address: str = ""
