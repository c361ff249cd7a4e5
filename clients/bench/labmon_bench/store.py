"""All that waits to be sent: the spool on disk, and memory where the disk refuses."""

from __future__ import annotations

import json
import logging
import sqlite3
import threading
import time
import uuid
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from labmon_bench.clock import power_up
from labmon_bench.reading import Reading
from labmon_bench.settings import SettingsFault
from labmon_bench.spool import Boot, Columns, Gap, Place, Spool

log = logging.getLogger("labmon_bench")

MEMORY_BYTES = 16 << 20
_DISK_AGAIN_S = 5.0
_MOVED_AT_ONCE = 1_000
_RESERVE_BYTES = 1 << 20


class StoreFault(Exception):
    """Nothing can be kept now; what a file holds stays there and is read again later."""


@dataclass(frozen=True)
class Batch:
    """Waiting readings of one boot, on their way out."""

    spool: Spool
    boot: Boot
    columns: list[Columns]
    has_more: bool

    def __len__(self) -> int:
        return sum(len(part.sequence) for part in self.columns)


class Store:
    """Gives readings their sequence numbers and keeps them until they are acknowledged; may be used from any thread.

    Args:
        path: The spool's file.
        limit_bytes: Its bound.
        memory_bytes: Bound of what is held in memory while the disk refuses.
    Raises:
        SettingsFault: The spool cannot be used.
    """

    def __init__(self, path: Path, limit_bytes: int, memory_bytes: int = MEMORY_BYTES) -> None:
        self.boot = Boot(uuid.uuid4().hex[:12], power_up())
        self.disk = open_spool(path, limit_bytes)
        self.memory = Spool(":memory:", memory_bytes)
        self.disk_fault = ""
        self._disk_again_s = 0.0
        self._next: dict[str, int] = {}
        self._passed: dict[int, int] = {}
        """By form on disk, up to where everything is acknowledged though the disk refused to let it go."""
        self._lock = threading.RLock()
        self._reserve = None if str(path) == ":memory:" else path.with_name(path.name + ".reserve")
        self._make_reserve()
        self.starts = self.disk.count_start()

    def close(self) -> None:
        """Write what is in memory to the disk if it takes it, and leave the file."""
        with self._lock:
            self._empty_memory()
            if self.memory.waiting:
                log.error("%d readings could not be written to the disk and are lost", self.memory.waiting)
            self.disk.close()
            self.memory.close()

    @property
    def waiting(self) -> int:
        """Readings that the door has not acknowledged."""
        return self.disk.waiting + self.memory.waiting

    @property
    def dropped(self) -> int:
        """Readings that were dropped unsent since the spool was made."""
        return self.disk.dropped + self.memory.dropped

    def keep(self, readings: Sequence[Reading], place: Place | None = None) -> None:
        """Keep readings of taps.

        Raises:
            StoreFault: The disk refuses and the readings have a place to come from again.
        """
        with self._lock:
            numbers = dict(self._next)
            numbered = []
            for reading in readings:
                numbered.append((numbers.get(reading.tap, 0), reading))
                numbers[reading.tap] = numbered[-1][0] + 1
            if not self._keep_on_disk(numbered, place):
                if place is not None:
                    raise StoreFault(f"the spool cannot be written ({self.disk_fault})")
                if dropped := self.memory.add(self.boot, numbered):
                    log.error("memory is full as well: %d readings dropped; the gap is recorded", dropped)
            self._next = numbers

    def next_batch(self, most: int, held: Sequence[tuple[str, int]] = ()) -> Batch | None:
        """The oldest waiting readings, or None.

        Args:
            held: (spool's name, form) to leave where they are.
        """
        with self._lock:
            self._empty_memory()
            for spool in (self.disk, self.memory):
                passed = self._passed if spool is self.disk else {}
                found = spool.next_columns(most, [form for name, form in held if name == self.name_of(spool)], passed)
                if found is not None:
                    return Batch(spool, *found)
            return None

    def name_of(self, spool: Spool) -> str:
        """ "disk" or "memory"."""
        return "disk" if spool is self.disk else "memory"

    def forget(self, batch: Batch, accepted: dict[str, list[tuple[int, int]]]) -> int:
        """Forget those of a batch whose numbers are acknowledged; how many of it are not."""
        left = 0
        with self._lock:
            for part in batch.columns:
                ranges = accepted.get(part.tap, [])
                numbers = [number for number in part.sequence if any(first <= number <= last for first, last in ranges)]
                left += len(part.sequence) - len(numbers)
                if not numbers:
                    continue
                cut = [(max(first, part.sequence[0]), min(last, part.sequence[-1])) for first, last in ranges]
                if batch.spool is self.memory:
                    self.memory.remove(part.form, cut)
                elif not self._remove_on_disk(part.form, cut) and len(numbers) == len(part.sequence):
                    self._passed[part.form] = part.sequence[-1]
        return left

    def place(self, source: str) -> dict[str, Any] | None:
        """How far a source has been read."""
        with self._lock:
            return self.disk.place(source)

    def lines_seen(self, source: str, digests: Sequence[bytes]) -> dict[bytes, int]:
        """How often each of these lines of a file has been seen."""
        with self._lock:
            return self.disk.lines_seen(source, digests)

    def oldest_at_us(self) -> int | None:
        """Time of the oldest waiting reading."""
        with self._lock:
            oldest_us = self.disk.oldest_at_us(), self.memory.oldest_at_us()
            return min((at_us for at_us in oldest_us if at_us is not None), default=None)

    def gaps(self) -> list[Gap]:
        """The newest gaps."""
        with self._lock:
            return self.memory.gaps() + self.disk.gaps()

    def _keep_on_disk(self, numbered: list[tuple[int, Reading]], place: Place | None) -> bool:
        self._empty_memory()
        if self.memory.waiting or (self.disk_fault and time.monotonic() < self._disk_again_s):
            return False  # numbers reach the disk in order: what lies below one that is done with is done with
        try:
            dropped = self.disk.add(self.boot, numbered, place)
        except sqlite3.OperationalError as error:
            self._note_disk_fault(error)
            return False
        if self.disk_fault:
            self.disk_fault = ""
            self._make_reserve()
        if dropped:
            log.error("the spool's bound is reached: the %d oldest readings were dropped unsent; the gap is recorded", dropped)
        return True

    def _remove_on_disk(self, form: int, ranges: list[tuple[int, int]]) -> bool:
        """Let acknowledged readings go; a full disk needs the reserve for that, since also a removal is written."""
        if form in self._passed:
            ranges = [(0, self._passed[form]), *ranges]
        for _ in range(2):
            try:
                self.disk.remove(form, ranges)
            except sqlite3.OperationalError as error:
                self._note_disk_fault(error)
                if not self._open_reserve():
                    return False
            else:
                self._passed.pop(form, None)
                return True
        return False

    def _make_reserve(self) -> None:
        """Some of the disk for the day it is full."""
        if self._reserve is not None and not self._reserve.exists():
            try:
                self._reserve.write_bytes(bytes(_RESERVE_BYTES))
            except OSError:
                self._reserve.unlink(missing_ok=True)

    def _open_reserve(self) -> bool:
        """Give the reserve to the spool; False where there is none."""
        if self._reserve is None or not self._reserve.exists():
            return False
        self._reserve.unlink()
        try:
            self.disk.tidy()
        except sqlite3.OperationalError:
            return False
        return True

    def _empty_memory(self) -> None:
        """Bring what memory holds to the disk, once that takes it again."""
        if not (self.memory.waiting or self.memory.dropped) or (self.disk_fault and time.monotonic() < self._disk_again_s):
            return
        try:
            for gap in reversed(self.memory.gaps(_MOVED_AT_ONCE)):
                self.disk.note_gap(gap)
            self.memory.forget_gaps()
            while (found := self.memory.next_columns(_MOVED_AT_ONCE, (), {})) is not None:
                for part in found[1]:
                    self.disk.add(self.boot, _numbered(part))
                    self.memory.remove(part.form, [(part.sequence[0], part.sequence[-1])])
        except sqlite3.OperationalError as error:
            self._note_disk_fault(error)
            return
        self.disk_fault = ""
        log.warning("the spool can be written again; what was in memory is on the disk")

    def _note_disk_fault(self, error: sqlite3.OperationalError) -> None:
        if not self.disk_fault:
            log.error("the spool cannot be written (%s): readings are held in memory; make room on the disk", error)
        self.disk_fault = str(error)
        self._disk_again_s = time.monotonic() + _DISK_AGAIN_S


def _numbered(part: Columns) -> list[tuple[int, Reading]]:
    """Rows of columns as numbered readings."""
    return [(sequence, Reading(part.tap, at_us, uptime_ms, dict(zip(part.names, values)), json.loads(more) if more else {}))
            for sequence, at_us, uptime_ms, more, *values in zip(part.sequence, part.at_us, part.uptime_ms, part.more,
                                                                 *part.values)]


def open_spool(path: Path, limit_bytes: int) -> Spool:
    """The spool on disk; a damaged one is put aside and a new one begun.

    Raises:
        SettingsFault: It cannot be used.
    """
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        return Spool(str(path), limit_bytes)
    except OSError as error:
        raise SettingsFault(f"spool {path}: its folder cannot be made ({error.strerror}); name one that you may write "
                            "to") from error
    except sqlite3.OperationalError as error:
        if "locked" in str(error):
            raise SettingsFault(f"spool {path}: another client is running with it; stop that one first, or ask it with the "
                                "command status") from error
        raise SettingsFault(f"spool {path}: cannot be written ({error}); make room, or name a file that you may "
                            "write to") from error
    except sqlite3.DatabaseError as error:
        aside = path.with_name(f"{path.name}.damaged-{time.strftime('%Y%m%dT%H%M%S', time.gmtime())}")
        path.rename(aside)
        for ending in ("-wal", "-shm"):
            beside = path.with_name(path.name + ending)
            if beside.exists():
                beside.rename(aside.with_name(aside.name + ending))
        log.error("the spool is damaged (%s): it is kept as %s and a new one begun", error, aside.name)
        return Spool(str(path), limit_bytes)
