"""Sends what waits, the oldest first, until the door has acknowledged it."""

from __future__ import annotations

import logging
import random
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from labmon_bench.door import Door, DoorAnswer, DoorAway
from labmon_bench.message import AnswerFault, accepted_ranges, message, packed
from labmon_bench.settings import SettingsFault
from labmon_bench.store import Batch, Store

log = logging.getLogger("labmon_bench")

MOST_READINGS = 5_000
HEARTBEAT_S = 30.0
LONGEST_WAIT_S = 60.0
NO_ENTRY_WAIT_S = 300.0
_SAY_AGAIN_S = 600.0
_FINISH_WITHIN_S = 3.0


@dataclass
class Tally:
    """What became of what was sent."""

    stored: int = 0
    known: int = 0
    set_aside: int = 0
    answered_s: float | None = None
    """Moment of the last answer 200, of the monotonic clock."""
    trouble: str = ""
    """Why nothing goes out now; empty where it does."""


class Sender:
    """The way from the store to the door.

    Args:
        key: Gives the station's key as it is now.
        send_every_s: Pause while nothing waits.
        told: Gives what the door is told of the client itself: every half minute, and at once when a source falls mute.
    """

    def __init__(self, store: Store, door: Door, key: Callable[[], str], send_every_s: float, seed: int | None = None,
                 told: Callable[[], dict[str, Any] | None] = lambda: None) -> None:
        self.store, self.door, self.key, self.send_every_s = store, door, key, send_every_s
        self.tally = Tally()
        self.told = told
        self._told_s = float("-inf")
        self._told_mute: tuple[str, ...] = ()
        self.most = MOST_READINGS
        self._random = random.Random(seed)
        self._failures = 0
        self._held: dict[tuple[str, int], tuple[float, int]] = {}
        self._heard_s = time.monotonic()
        self._said: dict[str, tuple[str, float]] = {}
        self._refused_key = ""
        self._refused_until_s = 0.0

    def run(self, stop: threading.Event) -> None:
        """Send until told to stop."""
        while not stop.is_set():
            stop.wait(self.turn())
        self.door.close()

    def finish(self) -> None:
        """Send what came last, where the door takes it without trouble."""
        until_s = time.monotonic() + _FINISH_WITHIN_S
        while self.store.waiting and not self.tally.trouble and time.monotonic() < until_s:
            self.turn()
        self.door.close()

    def turn(self) -> float:
        """One attempt; seconds to wait before the next."""
        now_s = time.monotonic()
        held = [form for form, (until_s, _) in self._held.items() if now_s < until_s]
        batch = self.store.next_batch(self.most, held)
        news = self._news(now_s)
        if batch is None and news is None and now_s - self._heard_s < HEARTBEAT_S:
            return self.send_every_s
        boot, columns = (self.store.boot, []) if batch is None else (batch.boot, batch.columns)
        try:
            key = self.key()
            if key == self._refused_key and now_s < self._refused_until_s:
                return self.send_every_s
            content, headers = packed(message(boot, columns, news))
            answer = self.door.post(content, headers, key)
        except SettingsFault as fault:
            return self._back_off(str(fault))
        except DoorAway as away:
            return self._back_off(str(away))
        if answer.status == 200:
            if news is not None:
                self._told_s, self._told_mute = now_s, tuple(news["mute"])
            return self._heed(answer, batch)
        return self._refused(answer, batch, key, now_s)

    def _news(self, now_s: float) -> dict[str, Any] | None:
        """What is to be told of the client now; None where the door knows it."""
        news = self.told()
        if news is None or (now_s - self._told_s < HEARTBEAT_S and tuple(news["mute"]) == self._told_mute):
            return None
        return news

    def _heed(self, answer: DoorAnswer, batch: Batch | None) -> float:
        """Forget what is acknowledged."""
        if batch is not None:
            try:
                left = self.store.forget(batch, accepted_ranges(answer.said, batch.boot))
            except AnswerFault as fault:
                return self._back_off(f"{fault}; is this labmon's address?")
            self._count(answer, batch)
            for part in batch.columns:
                self._held.pop((self.store.name_of(batch.spool), part.form), None)
            if left:
                return self._back_off(f"{left} of {len(batch)} readings were not acknowledged; they stay")
        if self._failures:
            log.warning("the door takes readings again; %d wait", self.store.waiting)
        self._failures, self._refused_key, self.tally.trouble = 0, "", ""
        self._said.pop("trouble", None)
        self._heard_s = self.tally.answered_s = time.monotonic()
        if batch is None or len(batch) < self.most // 2:
            self.most = min(MOST_READINGS, self.most * 2)
        return 0.0 if batch is not None and batch.has_more else self.send_every_s

    def _count(self, answer: DoorAnswer, batch: Batch) -> None:
        self.tally.stored += answer.said.get("stored", 0)
        self.tally.known += answer.said.get("known", 0)
        aside = answer.said.get("set_aside") or []
        self.tally.set_aside += len(aside)
        if aside:
            first = aside[0]
            self._say("aside", f"the door set {len(aside)} of {len(batch)} readings aside: tap {first.get('tap')}, "
                      f"{first.get('field')}: {first.get('why')}; {first.get('do')}")

    def _refused(self, answer: DoorAnswer, batch: Batch | None, key: str, now_s: float) -> float:
        if answer.status in (429, 503):
            return self._back_off(answer.words, answer.retry_after_s)
        if answer.status in (401, 403):
            self._refused_key, self._refused_until_s = key, now_s + NO_ENTRY_WAIT_S * self._random.uniform(0.8, 1.2)
            return self._back_off(f"the key is refused ({answer.words}); readings are kept. Put the station's current key into "
                                  "the key file")
        if answer.status == 413 and batch is not None and self.most > 1:
            self.most = max(1, min(self.most, len(batch)) // 2)
            return 0.0
        if answer.status == 400 and batch is not None and self._hold(answer, batch, now_s):
            return 0.0
        return self._back_off(f"the door refuses the readings with status {answer.status} ({answer.words}); they are kept")

    def _hold(self, answer: DoorAnswer, batch: Batch, now_s: float) -> bool:
        """Where a 400 names a tap, leave that tap's readings of this form for a while, so that the others can go."""
        _, _, rest = answer.field.partition("taps.")
        for part in batch.columns:
            if rest.split(".")[0] == part.tap:
                form = self.store.name_of(batch.spool), part.form
                times = self._held.get(form, (0.0, 0))[1]
                self._held[form] = now_s + min(900.0, 60.0 * 2**times) * self._random.uniform(0.8, 1.2), times + 1
                log.error("tap %s: its readings are refused (%s). They are kept and tried again later; a person must look",
                          part.tap, answer.words)
                return True
        return False

    def _back_off(self, why: str, at_least_s: float = 0.0) -> float:
        """Longer and longer, each time with a different share of chance, so that a lab's stations do not come all at once."""
        self._failures += 1
        self.tally.trouble = why
        self._say("trouble", why)
        wait_s = min(LONGEST_WAIT_S, 2.0 ** min(self._failures - 1, 10)) * self._random.uniform(0.5, 1.0)
        return wait_s + at_least_s

    def _say(self, kind: str, words: str) -> None:
        """In the log when it is new, and every ten minutes."""
        said, said_s = self._said.get(kind, ("", 0.0))
        if words != said or time.monotonic() - said_s > _SAY_AGAIN_S:
            self._said[kind] = words, time.monotonic()
            log.error("%s (%d readings wait)", words, self.store.waiting)
