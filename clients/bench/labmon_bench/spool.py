"""Readings on disk until the door has acknowledged them: one SQLite file, bounded in bytes, one owner.

A row leaves for two reasons only: the door acknowledged it, or the bound was reached; then the oldest go, and the gap is
written down in the same transaction.
"""

from __future__ import annotations

import json
import math
import sqlite3
import struct
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from labmon_bench.clock import now_us
from labmon_bench.reading import Reading

_LEAST_DROPPED = 50
_MOST_LINES = 200_000
"""Lines of a file that are remembered by their content."""
_TABLES = """
CREATE TABLE IF NOT EXISTS boot (id INTEGER PRIMARY KEY, name TEXT UNIQUE, power_up TEXT);
CREATE TABLE IF NOT EXISTS form (id INTEGER PRIMARY KEY, boot INTEGER, tap TEXT, names TEXT, UNIQUE (boot, tap, names));
CREATE TABLE IF NOT EXISTS reading (form INTEGER, sequence INTEGER, at_us INTEGER, uptime_ms INTEGER, cells BLOB, more TEXT,
                                    PRIMARY KEY (form, sequence)) WITHOUT ROWID;
CREATE TABLE IF NOT EXISTS gap (id INTEGER PRIMARY KEY, boot TEXT, tap TEXT, first INTEGER, last INTEGER, count INTEGER,
                                first_at_us INTEGER, last_at_us INTEGER, why TEXT, noted_us INTEGER);
CREATE TABLE IF NOT EXISTS place (source TEXT PRIMARY KEY, state TEXT);
CREATE TABLE IF NOT EXISTS line (source TEXT, digest BLOB, count INTEGER, number INTEGER, PRIMARY KEY (source, digest))
    WITHOUT ROWID;
CREATE TABLE IF NOT EXISTS fact (name TEXT PRIMARY KEY, value INTEGER);
"""


@dataclass(frozen=True)
class Boot:
    """One run of the client: its id at the door, and the run of the PC that its uptimes count from."""

    name: str
    power_up: str


@dataclass(frozen=True)
class Place:
    """How far a source has been read; kept in the same transaction as the readings that came from there.

    Attributes:
        lines: How often each line (by its digest) has been seen.
    """

    source: str
    state: Mapping[str, Any]
    lines: Mapping[bytes, int]


@dataclass(frozen=True)
class Columns:
    """Waiting readings of one tap that have the same columns, by sequence."""

    form: int
    tap: str
    names: tuple[str, ...]
    sequence: list[int]
    at_us: list[int]
    uptime_ms: list[int | None]
    values: list[list[float | None]]
    more: list[str | None]


@dataclass(frozen=True)
class Gap:
    """Readings of one tap that were dropped unsent."""

    boot: str
    tap: str
    first: int
    last: int
    count: int
    first_at_us: int
    last_at_us: int
    why: str


class Spool:
    """One file of waiting readings.

    Args:
        path: The file; ":memory:" for one that lives as long as the process.
        limit_bytes: Its bound.
    Raises:
        sqlite3.Error: It cannot be opened, is another program's, or is damaged.
    """

    def __init__(self, path: str, limit_bytes: int) -> None:
        self.limit_bytes = limit_bytes
        self.db = sqlite3.connect(path, timeout=2.0, isolation_level=None, check_same_thread=False)
        try:
            self.db.execute("PRAGMA locking_mode = EXCLUSIVE")
            self.db.execute("PRAGMA journal_mode = WAL")
            self.db.execute("PRAGMA synchronous = NORMAL")
            self.db.execute("PRAGMA wal_autocheckpoint = 100")
            if (said := self.db.execute("PRAGMA quick_check(1)").fetchone()[0]) != "ok":
                raise sqlite3.DatabaseError(said)
            self.db.executescript(_TABLES)
            self.page_bytes = self.db.execute("PRAGMA page_size").fetchone()[0]
            self.waiting = self._one("SELECT count(*) FROM reading")
            self.dropped = self._one("SELECT coalesce(sum(count), 0) FROM gap")
        except sqlite3.Error:
            self.db.close()
            raise
        self._forms: dict[tuple[Boot, str, tuple[str, ...]], int] = {}
        self._lines_written = 0

    def close(self) -> None:
        """Leave the file."""
        self.db.close()

    def add(self, boot: Boot, numbered: Iterable[tuple[int, Reading]], place: Place | None = None) -> int:
        """Keep readings under their sequence numbers; how many old ones had to go.

        With a place the commit is on the disk itself before this returns, not only safe from a killed process.

        Raises:
            sqlite3.OperationalError: The disk is full or refuses; nothing is kept.
        """
        rows, keys = [], []
        for sequence, reading in numbered:
            names = tuple(reading.values)
            cells = struct.pack(f"<{len(names)}d", *(math.nan if value is None else value for value in reading.values.values()))
            keys.append((boot, reading.tap, names))
            rows.append((sequence, reading.at_us, reading.uptime_ms, cells, json.dumps(reading.more) if reading.more else None))
        dropped = 0
        self.db.execute(f"PRAGMA synchronous = {'NORMAL' if place is None else 'FULL'}")

        def write() -> None:
            nonlocal dropped
            dropped = self._make_room()
            forms = [self._form(key) for key in keys]
            self.db.executemany("INSERT INTO reading VALUES (?, ?, ?, ?, ?, ?)",
                                ((form, *row) for form, row in zip(forms, rows)))
            if place is not None:
                self._write_place(place)

        self._in_transaction(write)
        self.waiting += len(rows) - dropped
        self.dropped += dropped
        return dropped

    def next_columns(self, most: int, held: Iterable[int],
                     passed: Mapping[int, int]) -> tuple[Boot, list[Columns], bool] | None:
        """The oldest waiting readings: of one boot, and of each tap those with the same columns; and whether more can follow.

        Args:
            most: Readings altogether.
            held: Forms to leave where they are.
            passed: By form, the last sequence that is done with though its row is still there.
        """
        chosen: dict[str, tuple[int, int, tuple[str, ...]]] = {}
        boot: tuple[int, Boot] | None = None
        held, candidates = set(held), 0
        for form, boot_id, name, power_up, tap, names in self.db.execute(
                "SELECT form.id, boot.id, boot.name, power_up, tap, names FROM form JOIN boot ON boot.id = form.boot "
                "ORDER BY boot.id").fetchall():
            if form in held:
                continue
            first = self._one("SELECT min(sequence) FROM reading WHERE form = ? AND sequence > ?", form, passed.get(form, -1))
            candidates += first is not None
            if first is None or (boot is not None and boot[0] != boot_id):
                continue
            if tap not in chosen or first < chosen[tap][0]:
                boot = boot_id, Boot(name, power_up)
                chosen[tap] = first, form, tuple(json.loads(names))
        if boot is None:
            return None
        each = max(1, most // len(chosen))
        columns = [self._columns(tap, form, names, first, each) for tap, (first, form, names) in chosen.items()]
        return boot[1], columns, candidates > len(chosen) or any(len(part.sequence) == each for part in columns)

    def remove(self, form: int, ranges: Sequence[tuple[int, int]]) -> None:
        """Forget acknowledged readings.

        Raises:
            sqlite3.OperationalError: The disk refuses; they are all still there.
        """
        removed = 0

        def write() -> None:
            nonlocal removed
            removed = sum(self.db.execute("DELETE FROM reading WHERE form = ? AND sequence BETWEEN ? AND ?",
                                          (form, first, last)).rowcount for first, last in ranges)

        self._in_transaction(write)
        self.waiting -= removed

    def tidy(self) -> None:
        """Bring the journal into the file, so that it needs no room beside it.

        Raises:
            sqlite3.OperationalError: The disk refuses.
        """
        self.db.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()

    def note_gap(self, gap: Gap) -> None:
        """Write down what was dropped elsewhere."""
        self._insert_gap(gap)
        self.dropped += gap.count

    def forget_gaps(self) -> None:
        """They are noted elsewhere."""
        self.db.execute("DELETE FROM gap")
        self.dropped = 0

    def gaps(self, newest: int = 20) -> list[Gap]:
        """What was dropped, the newest first."""
        return [Gap(*row) for row in self.db.execute(
            "SELECT boot, tap, first, last, count, first_at_us, last_at_us, why FROM gap ORDER BY id DESC LIMIT ?", (newest,))]

    def oldest_at_us(self) -> int | None:
        """Time of the oldest waiting reading."""
        heads = (self.db.execute("SELECT at_us FROM reading WHERE form = ? ORDER BY sequence LIMIT 1", row).fetchone()
                 for row in self.db.execute("SELECT id FROM form").fetchall())
        return min((head[0] for head in heads if head is not None), default=None)

    def count_start(self) -> int:
        """How often the client was started with this file, this time included; forms of nothing are cleared away."""
        self.db.execute("DELETE FROM form WHERE NOT EXISTS (SELECT 1 FROM reading WHERE form = form.id)")
        self.db.execute("DELETE FROM boot WHERE id NOT IN (SELECT boot FROM form)")
        self.db.execute("INSERT INTO fact VALUES ('starts', 1) ON CONFLICT (name) DO UPDATE SET value = value + 1")
        return self._one("SELECT value FROM fact WHERE name = 'starts'")

    def place(self, source: str) -> dict[str, Any] | None:
        """How far a source has been read; None where never."""
        row = self.db.execute("SELECT state FROM place WHERE source = ?", (source,)).fetchone()
        return None if row is None else json.loads(row[0])

    def lines_seen(self, source: str, digests: Iterable[bytes]) -> dict[bytes, int]:
        """How often each of these lines has been seen."""
        found = {}
        for digest in digests:
            row = self.db.execute("SELECT count FROM line WHERE source = ? AND digest = ?", (source, digest)).fetchone()
            if row is not None:
                found[digest] = row[0]
        return found

    def used_bytes(self) -> int:
        """Bytes in use."""
        return (self._one("PRAGMA page_count") - self._one("PRAGMA freelist_count")) * self.page_bytes

    def _in_transaction(self, write: Callable[[], None]) -> None:
        self.db.execute("BEGIN IMMEDIATE")
        try:
            write()
            self.db.execute("COMMIT")
        except BaseException:
            if self.db.in_transaction:
                self.db.execute("ROLLBACK")
            self._forms.clear()
            raise

    def _one(self, sql: str, *values: Any) -> Any:
        return self.db.execute(sql, values).fetchone()[0]

    def _form(self, key: tuple[Boot, str, tuple[str, ...]]) -> int:
        if key not in self._forms:
            boot, tap, names = key
            self.db.execute("INSERT OR IGNORE INTO boot (name, power_up) VALUES (?, ?)", (boot.name, boot.power_up))
            boot_id = self._one("SELECT id FROM boot WHERE name = ?", boot.name)
            self.db.execute("INSERT OR IGNORE INTO form (boot, tap, names) VALUES (?, ?, ?)", (boot_id, tap, json.dumps(names)))
            self._forms[key] = self._one("SELECT id FROM form WHERE boot = ? AND tap = ? AND names = ?", boot_id, tap,
                                         json.dumps(names))
        return self._forms[key]

    def _columns(self, tap: str, form: int, names: tuple[str, ...], first: int, most: int) -> Columns:
        rows = self.db.execute("SELECT sequence, at_us, uptime_ms, cells, more FROM reading WHERE form = ? AND sequence >= ? "
                               "ORDER BY sequence LIMIT ?", (form, first, most)).fetchall()
        sequence, at_us, uptime_ms, cells, more = map(list, zip(*rows))
        numbers = struct.unpack(f"<{len(names) * len(rows)}d", b"".join(cells))
        values = [[None if value != value else value for value in numbers[start::len(names)]] for start in range(len(names))]
        return Columns(form, tap, names, sequence, at_us, uptime_ms, values, more)

    def _make_room(self) -> int:
        """Drop the oldest where the bound is reached; how many."""
        dropped = 0
        while self.used_bytes() > self.limit_bytes:
            now = self._drop_oldest()
            if not now:
                break
            dropped += now
        return dropped

    def _drop_oldest(self) -> int:
        heads = self.db.execute(
            "SELECT form.id, boot.name, tap, (SELECT at_us FROM reading WHERE form = form.id ORDER BY sequence LIMIT 1) AS at "
            "FROM form JOIN boot ON boot.id = form.boot WHERE at IS NOT NULL ORDER BY at LIMIT 1").fetchall()
        for form, boot, tap, _ in heads:
            rows = self.db.execute("SELECT sequence, at_us FROM reading WHERE form = ? ORDER BY sequence LIMIT ?",
                                   (form, max(_LEAST_DROPPED, self.waiting // 200))).fetchall()
            first, last = rows[0][0], rows[-1][0]
            self.db.execute("DELETE FROM reading WHERE form = ? AND sequence BETWEEN ? AND ?", (form, first, last))
            self._insert_gap(Gap(boot, tap, first, last, len(rows), rows[0][1], rows[-1][1],
                                 f"the spool's bound of {self.limit_bytes / 2**20:g} MB was reached"))
            return len(rows)
        return 0

    def _insert_gap(self, gap: Gap) -> None:
        self.db.execute("INSERT INTO gap VALUES (NULL, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                        (gap.boot, gap.tap, gap.first, gap.last, gap.count, gap.first_at_us, gap.last_at_us, gap.why, now_us()))

    def _write_place(self, place: Place) -> None:
        self.db.execute("INSERT INTO place VALUES (?, ?) ON CONFLICT (source) DO UPDATE SET state = excluded.state",
                        (place.source, json.dumps(place.state)))
        number = now_us()
        self.db.executemany(
            "INSERT INTO line VALUES (?, ?, ?, ?) ON CONFLICT (source, digest) DO UPDATE SET count = max(count, excluded.count), "
            "number = excluded.number", ((place.source, digest, count, number) for digest, count in place.lines.items()))
        self._lines_written += len(place.lines)
        if self._lines_written >= _MOST_LINES // 20:
            self._lines_written = 0
            self.db.execute("DELETE FROM line WHERE source = ?1 AND number < (SELECT number FROM line WHERE source = ?1 "
                            "ORDER BY number DESC LIMIT 1 OFFSET ?2)", (place.source, _MOST_LINES))
