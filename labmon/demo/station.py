"""An honest station in software: it numbers, keeps, sends, and forgets only what the lab acknowledged (CONTRACT 1)."""

import random
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from labmon.demo.door import Answer, NoAnswer
from labmon.demo.spool import Reading, Spool, as_columns

BATCH = 300
FIRST_WAIT_S, LONGEST_WAIT_S = 0.5, 30.0
Say = Callable[[str], None]


class Sender(Protocol):
    """Anything that takes a batch to the door."""

    def send(self, batch: dict[str, Any]) -> Answer: ...


@dataclass(slots=True, kw_only=True)
class DemoStation:
    """One station with one tap.

    Attributes:
        boot: Random at power-up; its clock runs ``clock_ahead_s`` ahead.
        started_us: True time of the power-up, µs since 1970.
        wait_s: Pause before the next attempt, grown with jitter after every failure; ``next_try_us`` says when.
        refused: Batches that the door called undecodable: kept for a person to look at, not sent again.
    """

    name: str
    tap: str
    door: Sender
    firmware: str
    started_us: int
    spool: Spool
    say: Say
    clock_ahead_s: float = 0.0
    boot: str = field(default_factory=lambda: f"{random.SystemRandom().getrandbits(32):08x}")
    sequence: int = 0
    batch: int = BATCH
    failures: int = 0
    next_try_us: int = 0
    is_locked_out: bool = False
    refused: list[dict[str, Any]] = field(default_factory=list)

    def take(self, at_us: NDArray[np.int64], columns: dict[str, NDArray[np.float64]]) -> None:
        """Number and keep readings that were just made."""
        ahead_us = round(self.clock_ahead_s * 1e6)
        for index, moment_us in enumerate(at_us):
            values = {name: float(column[index]) for name, column in columns.items()}
            self.spool.add(Reading(sequence=self.sequence, own_at_us=int(moment_us) + ahead_us,
                                   uptime_ms=(int(moment_us) - self.started_us) // 1000, values=values))
            self.sequence += 1

    def try_to_send(self, now_us: int) -> None:
        """Send until the spool is empty or something stands in the way; never raises for a fault of the lab."""
        while self.spool.waiting and now_us >= self.next_try_us and not self.is_locked_out:
            readings = self.spool.oldest(self.batch)
            message = self._message(readings, now_us)
            try:
                answer = self.door.send(message)
            except NoAnswer as fault:
                self._back_off(now_us, f"no answer from the lab ({fault})")
                return
            self._heed(answer, message, readings, now_us)

    def _message(self, readings: list[Reading], now_us: int) -> dict[str, Any]:
        own_now = datetime.fromtimestamp((now_us + self.clock_ahead_s * 1e6) / 1e6, UTC)
        return {"boot": self.boot, "firmware": self.firmware,
                "now": {"at": own_now.isoformat(timespec="milliseconds").replace("+00:00", "Z"),
                        "uptime_ms": (now_us - self.started_us) // 1000},
                "taps": {self.tap: as_columns(readings)}}

    def _heed(self, answer: Answer, message: dict[str, Any], readings: list[Reading], now_us: int) -> None:
        match answer.status:
            case 200:
                self._acknowledged(answer.body, readings, now_us)
            case 413 if self.batch > 1:
                self.batch = max(self.batch // 2, 1)
            case 400 | 413:
                self.say(f"{self.name}: the lab cannot read a batch: {answer.body.get('detail', answer.body)}")
                self.refused.append(message)
                self.spool.forget([(readings[0].sequence, readings[-1].sequence)])
            case 401 | 403:
                self.is_locked_out = True
                self.say(f"{self.name}: its key is refused ({answer.status}); it keeps its readings and waits for a person")
            case _:
                self._back_off(now_us, f"the lab says {answer.status}", answer.retry_after_s)

    def _acknowledged(self, body: dict[str, Any], readings: list[Reading], now_us: int) -> None:
        aside = [readings[row["row"]].sequence for row in body.get("set_aside", ())
                 if row.get("tap") == self.tap and 0 <= row.get("row", -1) < len(readings)]
        ranges = body.get("accepted", {}).get("ranges", {}).get(self.tap, ())
        if self.spool.forget(ranges, aside):
            self.failures, self.batch = 0, BATCH
        else:
            self._back_off(now_us, "the answer acknowledges nothing of the batch")

    def _back_off(self, now_us: int, why: str, at_least_s: float = 0.0) -> None:
        """Wait longer after each failure, with jitter, so that stations do not come back all at once."""
        wait_s = max(at_least_s, min(FIRST_WAIT_S * 2.0**self.failures, LONGEST_WAIT_S)) * random.uniform(0.7, 1.3)
        self.next_try_us = now_us + round(wait_s * 1e6)
        if self.failures in (0, 5):
            self.say(f"{self.name}: {why}; {len(self.spool.waiting)} readings wait")
        self.failures += 1
