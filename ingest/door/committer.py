"""The group commit: whatever waits when one commit ends goes into the next transaction. No timer.

One thread and one database connection per process. A body that the database refuses does not take the others with it:
they are committed one by one and the culprit is answered with a refusal.
"""

import logging
import threading
import time
from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import psycopg

from ingest.announce import announce
from ingest.database import connect
from ingest.door.body import Body
from ingest.door.commit import Answer, Ids, StaleIds, Transaction
from ingest.door.presence import Presence
from ingest.door.refusal import Refusal, bad_form, come_again
from ingest.door.rows import keep_message, note_refused
from ingest.times import now_us

log = logging.getLogger(__name__)

MOST_BODIES = 200
MOST_READINGS = 200_000
MOST_WAITING = 2_000_000
"""Readings in the queue before stations are told to slow down."""
_TRIES = 4
_AWAY_S = 1.0


@dataclass(frozen=True, slots=True)
class RefusedNumbers:
    """Smallest numbers of a body that was refused, to be kept."""

    station_id: int
    boot: str
    lowest: dict[int, int]
    count: int = 1


@dataclass(frozen=True, slots=True)
class RefusedMessage:
    """A message that was refused whole, to be set aside as it came."""

    station_id: int
    message: bytes
    refusal: Refusal
    count: int = 1


Item = Body | RefusedNumbers | RefusedMessage
Result = Answer | Refusal
Told = Callable[[Sequence[tuple["Waiting", Result]]], None]


@dataclass(slots=True)
class Waiting:
    """One item of the queue with whoever waits for it."""

    item: Item
    token: Any


class Committer:
    """Takes checked bodies, commits them in groups and tells the results from its own thread."""

    def __init__(self, tell: Told, *, has_presence: bool = True) -> None:
        self._tell = tell
        self._queue: deque[Waiting] = deque()
        self._change = threading.Condition()
        self._readings = 0
        self._is_closing = False
        self._thread: threading.Thread | None = None
        self._db: psycopg.Connection[Any] | None = None
        self._ids = Ids()
        self._presence = Presence() if has_presence else None
        self._away_until_s = 0.0

    def start(self) -> None:
        """Start the thread; a second call does nothing."""
        if self._thread is None:
            self._thread = threading.Thread(target=self._work, name="door-committer", daemon=True)
            self._thread.start()

    def submit(self, item: Item, token: Any) -> None:
        """Queue an item; its result is told later.

        Raises:
            Refusal: 429 when too much waits, 503 when the database is away or the door closes.
        """
        with self._change:
            if self._is_closing:
                raise come_again(503, "the door is closing", 2)
            if time.monotonic() < self._away_until_s:
                raise come_again(503, "the database is away", 5)
            if self._readings > MOST_WAITING:
                raise come_again(429, "too many readings wait to be stored", 2)
            self._readings += item.count
            self._queue.append(Waiting(item, token))
            self._change.notify()

    def close(self, patience_s: float = 10.0) -> None:
        """Commit what waits, then stop."""
        with self._change:
            self._is_closing = True
            self._change.notify()
        if self._thread is not None:
            self._thread.join(patience_s)

    def _work(self) -> None:
        while True:
            group = self._next_group()
            if group is None:
                break
            if group:
                self._tell(self._commit_group(group))
            if self._presence is not None and self._presence.is_due():
                self._beat()
        if self._db is not None:
            self._db.close()

    def _next_group(self) -> list[Waiting] | None:
        """What waits, as far as one transaction should take; empty when only a heartbeat is due; None at the end."""
        with self._change:
            if not self._queue and not self._is_closing:
                self._change.wait(self._presence.wait_s() if self._presence is not None else None)
            if not self._queue:
                return None if self._is_closing else []
            group: list[Waiting] = []
            readings = 0
            while self._queue and len(group) < MOST_BODIES:
                if group and readings + self._queue[0].item.count > MOST_READINGS:
                    break
                group.append(self._queue.popleft())
                readings += group[-1].item.count
            self._readings -= readings
            return group

    def _commit_group(self, group: list[Waiting]) -> list[tuple[Waiting, Result]]:
        """Results of a group; never raises."""
        try:
            results: Sequence[Result] = self._commit([waiting.item for waiting in group])
        except (psycopg.OperationalError, psycopg.ProgrammingError, psycopg.InternalError) as error:
            self._note_away(error)
            results = [come_again(503, "the database is away", 5)] * len(group)
        except Exception:  # one body must not take the others with it, whatever is wrong with it
            if len(group) > 1:
                return [told for waiting in group for told in self._commit_group([waiting])]
            log.exception("body_not_stored", extra=_facts(group[0].item))
            results = [bad_form("this body could not be stored",
                                "Keep it and tell the person who runs labmon; the log names the fault.")]
        else:
            if any(isinstance(result, Answer) and result.stored for result in results):
                announce()
        return list(zip(group, results, strict=True))

    def _commit(self, items: list[Item]) -> list[Result]:
        """One transaction, tried again where two doors or a restart got in each other's way."""
        for attempt in range(_TRIES):
            try:
                return self._commit_once(items)
            except StaleIds:
                self._ids = Ids()
            except (psycopg.errors.DeadlockDetected, psycopg.errors.SerializationFailure, psycopg.errors.LockNotAvailable):
                if attempt == _TRIES - 1:
                    raise
            except psycopg.OperationalError:
                self._drop_connection()
                if attempt:
                    raise
        raise psycopg.OperationalError("row ids stay stale")

    def _commit_once(self, items: list[Item]) -> list[Result]:
        if self._db is None or self._db.closed:
            self._db = connect(autocommit=False)
        bodies = [item for item in items if isinstance(item, Body)]
        try:
            transaction = Transaction(self._db, bodies, self._ids)
            answers = iter(transaction.run() if bodies else ())
            for item in items:
                if isinstance(item, RefusedNumbers):
                    note_refused(self._db, item.station_id, item.boot, item.lowest, now_us())
                elif isinstance(item, RefusedMessage):
                    keep_message(self._db, item.station_id, item.message, item.refusal, now_us())
            self._db.commit()
        except BaseException:
            self._roll_back()
            raise
        self._ids.adopt(transaction.found_ids)
        return [next(answers) if isinstance(item, Body) else Answer("") for item in items]

    def _roll_back(self) -> None:
        try:
            if self._db is not None:
                self._db.rollback()
        except psycopg.Error:
            self._drop_connection()

    def _drop_connection(self) -> None:
        if self._db is not None:
            self._db.close()
            self._db = None

    def _note_away(self, error: Exception) -> None:
        """Stations that come within the next second are answered at once."""
        log.warning("database_away", extra={"error": str(error)[:200]})
        self._drop_connection()
        with self._change:
            self._away_until_s = time.monotonic() + _AWAY_S

    def _beat(self) -> None:
        try:
            if self._db is None or self._db.closed:
                self._db = connect(autocommit=False)
            assert self._presence is not None
            self._presence.beat(self._db)
            self._db.commit()
        except psycopg.Error as error:
            self._note_away(error)
            time.sleep(0.2)


def _facts(item: Item) -> dict[str, Any]:
    if isinstance(item, Body):
        return {"station": item.station.name, "boot": item.boot, "readings": item.count}
    return {"station_id": item.station_id}
