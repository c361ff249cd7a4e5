"""A beat that sends tasks only while it holds the lab's one beat lock, so that two may run and one counts."""

import logging
from contextlib import suppress
from typing import Any

import psycopg
from celery.beat import Scheduler
from django.conf import settings

from labmon.services import conninfo_of

log = logging.getLogger(__name__)
BEAT_LOCK = 0x6C61626D_62656174          # "labmbeat": a number of our own among the database's advisory locks
LOOK_AGAIN_S = 2.0


class BeatLock:
    """An advisory lock held by a connection of its own; the database frees it when that connection goes."""

    def __init__(self, conninfo: dict[str, Any]) -> None:
        self.conninfo = conninfo
        self.connection: psycopg.Connection | None = None

    def is_held(self) -> bool:
        """True while the lock is ours; takes it where it is free. A database that is away means no."""
        try:
            if self.connection is not None:
                self.connection.execute("select 1")
                return True
            return self._taken()
        except psycopg.OperationalError:
            self.release()
            return False

    def _taken(self) -> bool:
        connection = psycopg.connect(**self.conninfo, autocommit=True, connect_timeout=5)
        if connection.execute("select pg_try_advisory_lock(%s)", [BEAT_LOCK]).fetchone() == (True,):
            self.connection = connection
            log.info("beat_lock_taken")
            return True
        connection.close()
        return False

    def release(self) -> None:
        """Give it back, at once where the database is there: a closed connection's lock goes a moment after it."""
        if self.connection is not None:
            with suppress(psycopg.Error):
                self.connection.execute("select pg_advisory_unlock(%s)", [BEAT_LOCK])
            self.connection.close()
            self.connection = None


class OneBeatScheduler(Scheduler):
    """Celery's in-memory scheduler behind the lock; every task is keyed by its due slot, so none is lost or doubled."""

    lock: BeatLock

    def setup_schedule(self) -> None:
        """Take the schedule from the settings, and know where the lock is."""
        super().setup_schedule()
        self.lock = BeatLock(conninfo_of(settings.DATABASES["default"]))

    def tick(self, *args: Any, **kwargs: Any) -> float:
        """Send what is due, or wait for the lock; returns seconds to the next look."""
        if not self.lock.is_held():
            return LOOK_AGAIN_S
        return min(super().tick(*args, **kwargs), LOOK_AGAIN_S)

    def close(self) -> None:
        """Give the lock back at once, so that another beat goes on."""
        super().close()
        self.lock.release()
