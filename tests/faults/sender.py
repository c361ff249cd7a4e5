"""An honest station (CONTRACT 1): it numbers its readings, keeps each until it is acknowledged, and sends again.

Nothing of ours is used here: standard library, numpy and the contract only.
"""

import http.client
import json
import random
import threading
import time
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from tests.faults.course import Course

PATH = "/api/v1/readings"
PAUSE_S = 0.2
TIMEOUT_S = 6.0
MOST = 40
LONGEST_WAIT_S = 2.0


@dataclass(slots=True)
class Tally:
    """What a sender met.

    Attributes:
        acknowledged_s: For each acknowledged batch when it was sent (monotonic clock) and how long the answer took.
        unanswered: Attempts without a whole answer; ``lost``: answers thrown away on purpose.
        told_to_wait: Answers 429 and 503, each with Retry-After; ``told_503``: those of them that were 503.
        unforeseen: Every other answer that is not 200.
    """

    acknowledged_s: list[tuple[float, float]] = field(default_factory=list)
    stored: int = 0
    known: int = 0
    unanswered: int = 0
    lost: int = 0
    told_to_wait: int = 0
    told_503: int = 0
    unforeseen: list[tuple[int, str]] = field(default_factory=list)


class HonestSender(threading.Thread):
    """Makes the readings of a course in real time and sends them until all are acknowledged.

    Args:
        port: The lab's, on this machine.
        key: The station's.
        tap, course: What it measures.
        started_us: Data time of the course's start, near now.
        seed: Of everything random: waits, which batch goes first, which answers get lost.
        lost_share: Share of answers that are thrown away, as if the line broke behind the commit.
        newest_share: Share of batches that begin with the newest readings instead of the oldest.
        most: Readings in a batch, at most.
        pause_s: Between two batches.
    """

    def __init__(self, *, port: int, key: str, tap: str, course: Course, started_us: int, seed: int, lost_share: float = 0.0,
                 newest_share: float = 0.0, most: int = MOST, pause_s: float = PAUSE_S) -> None:
        super().__init__(name=f"sender-{tap}", daemon=True)
        self.port, self.key, self.tap, self.course, self.started_us = port, key, tap, course, started_us
        self.random = random.Random(seed)
        self.lost_share, self.newest_share = lost_share, newest_share
        self.most, self.pause_s = most, pause_s
        self.boot = f"{self.random.getrandbits(32):08x}"
        self.tally = Tally()
        self.made = 0
        self.waiting: list[int] = []
        self.given_up = threading.Event()
        self.connection: http.client.HTTPConnection | None = None

    def run(self) -> None:
        """Send until nothing waits and nothing more comes."""
        failures = 0
        while not self.given_up.is_set() and (self.made < len(self.course) or self.waiting):
            self._make_readings()
            wait_s = self._send_some() if self.waiting else 0.0
            failures = 0 if wait_s == 0.0 else failures + 1
            self.given_up.wait(self.pause_s + wait_s * self.random.uniform(0.5, 1.0) * min(failures, 4))
        self._hang_up()

    def _make_readings(self) -> None:
        now_us = time.time_ns() // 1000
        made = int(np.searchsorted(self.course.after_us, now_us - self.started_us, side="right"))
        self.waiting += range(self.made, made)
        self.made = max(self.made, made)

    def _send_some(self) -> float:
        """One attempt; seconds to wait before the next, 0 where it went well."""
        newest_first = self.random.random() < self.newest_share
        count = self.random.randint(1, 6) if newest_first else self.random.randint(self.most // 2, self.most)
        batch = self.waiting[-count:] if newest_first else self.waiting[:count]
        began_s = time.monotonic()
        answer = self._post(json.dumps(self._message(batch)).encode())
        if answer is None:
            self.tally.unanswered += 1
            return 0.25
        status, headers, body = answer
        if status == 200:
            self._heed(began_s, batch, json.loads(body))
            return 0.0
        if status in (429, 503):
            self.tally.told_to_wait += 1
            self.tally.told_503 += status == 503
            return min(float(headers["Retry-After"]), LONGEST_WAIT_S)
        self.tally.unforeseen.append((status, body.decode(errors="replace")[:300]))
        self.given_up.set()
        return 0.0

    def _message(self, batch: list[int]) -> dict[str, Any]:
        columns: dict[str, list[Any]] = {"sequence": batch, "at": (self.started_us + self.course.after_us[batch]).tolist()}
        columns |= {name: values[batch].tolist() for name, values in self.course.columns.items()}
        return {"boot": self.boot, "now": {"at": time.time_ns() // 1000}, "taps": {self.tap: columns}}

    def _post(self, body: bytes) -> tuple[int, Any, bytes] | None:
        try:
            if self.connection is None:
                self.connection = http.client.HTTPConnection("127.0.0.1", self.port, timeout=TIMEOUT_S)
            headers = {"Authorization": f"Bearer {self.key}", "Content-Type": "application/json"}
            self.connection.request("POST", PATH, body, headers)
            answer = self.connection.getresponse()
            return answer.status, answer.headers, answer.read()
        except (OSError, http.client.HTTPException):
            self._hang_up()
            return None

    def _hang_up(self) -> None:
        if self.connection is not None:
            self.connection.close()
            self.connection = None

    def _heed(self, began_s: float, batch: list[int], answer: dict[str, Any]) -> None:
        if self.random.random() < self.lost_share:
            self.tally.lost += 1
            return
        self.tally.acknowledged_s.append((began_s, time.monotonic() - began_s))
        self.tally.stored += answer["stored"]
        self.tally.known += answer["known"]
        held = {number for first, last in answer["accepted"]["ranges"][self.tap] for number in range(first, last + 1)}
        left = [number for number in batch if number not in held]
        self.waiting = (left + self.waiting[len(batch):] if batch[0] == self.waiting[0] else self.waiting[:-len(batch)] + left)
