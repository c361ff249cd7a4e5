"""Writes down when this process's door was up; silence is judged only inside such spans."""

import time
import uuid
from typing import Any

import psycopg

from ingest.times import now_us

INTERVAL_S = 1.0
_BROKEN_AFTER_S = 2.5


class Presence:
    """One process's heartbeat; a break (database away, machine asleep) begins a new span."""

    def __init__(self) -> None:
        self.process = uuid.uuid4()
        self._last_s: float | None = None

    def is_due(self) -> bool:
        """A second has passed."""
        return self._last_s is None or time.monotonic() - self._last_s >= INTERVAL_S

    def wait_s(self) -> float:
        """Time until the next heartbeat."""
        return 0.0 if self._last_s is None else max(0.0, INTERVAL_S - (time.monotonic() - self._last_s))

    def beat(self, db: psycopg.Connection[Any]) -> None:
        """Prolong the span up to now, in a transaction of its own."""
        beaten_s = time.monotonic()
        if self._last_s is not None and beaten_s - self._last_s > _BROKEN_AFTER_S:
            self.process = uuid.uuid4()
        moment_us = now_us()
        db.execute("INSERT INTO ingest_doorup AS kept (process, from_us, until_us) VALUES (%s, %s, %s) "
                   "ON CONFLICT (process) DO UPDATE SET until_us = greatest(kept.until_us, excluded.until_us)",
                   (self.process, moment_us, moment_us))
        self._last_s = beaten_s
