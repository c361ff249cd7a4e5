"""What a station keeps until the lab has said that it has it."""

from collections import deque
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Any


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """One reading of a tap as it waits: its number in this boot, the station's own stamp and uptime, its values."""

    sequence: int
    own_at_us: int
    uptime_ms: int
    values: dict[str, float]


@dataclass(slots=True)
class Spool:
    """Unacknowledged readings of one tap, oldest first; what does not fit any more is counted as lost."""

    holds: int
    waiting: deque[Reading] = field(default_factory=deque)
    lost: int = 0

    def add(self, reading: Reading) -> None:
        """Keep a reading; the oldest gives way when the buffer is full."""
        self.waiting.append(reading)
        while len(self.waiting) > self.holds:
            self.waiting.popleft()
            self.lost += 1

    def oldest(self, count: int) -> list[Reading]:
        """Up to ``count`` readings, oldest first."""
        return [self.waiting[index] for index in range(min(count, len(self.waiting)))]

    def forget(self, ranges: Iterable[tuple[int, int]], also: Iterable[int] = ()) -> int:
        """Forget what was acknowledged: sequence ranges, both ends included, and single ones; returns how many."""
        spans, singles = [tuple(span) for span in ranges], set(also)
        kept = [reading for reading in self.waiting if reading.sequence not in singles
                and not any(first <= reading.sequence <= last for first, last in spans)]
        forgotten = len(self.waiting) - len(kept)
        self.waiting = deque(kept)
        return forgotten


def as_columns(readings: list[Reading]) -> dict[str, list[Any]]:
    """Readings as the columns of CONTRACT section 1."""
    names = dict.fromkeys(name for reading in readings for name in reading.values)
    return {"sequence": [reading.sequence for reading in readings], "at": [reading.own_at_us for reading in readings],
            "uptime_ms": [reading.uptime_ms for reading in readings],
            **{name: [reading.values[name] for reading in readings] for name in names}}
