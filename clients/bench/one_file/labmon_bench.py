#!/usr/bin/env python3
"""labmon's bench client in one file: ``python labmon_bench.py run bench.ini`` (docs/bench-client.md).

Made from clients/bench/labmon_bench by make_one_file.py; change it there. Needs Python 3.9 or newer and nothing else.
"""

from __future__ import annotations

import argparse
import configparser
import contextlib
import csv
import difflib
import email.utils
import fnmatch
import getpass
import gzip
import hashlib
import http.client
import importlib.util
import json
import logging
import logging.handlers
import math
import os
import plistlib
import random
import re
import signal
import socket
import sqlite3
import ssl
import struct
import subprocess
import sys
import threading
import time
import urllib.parse
import uuid
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass, field, replace
from datetime import datetime, timedelta, timezone, tzinfo
from pathlib import Path
from typing import Any, IO, Protocol, TypeVar, Union
from xml.sax.saxutils import escape



# ---- door ------------------------------------------------------------------------------------------------
# The station door over HTTP, as a kept connection.

PATH = "/api/v1/readings"


class DoorAway(Exception):
    """No whole answer came; words say where it ended and what to look at."""


@dataclass(frozen=True)
class DoorAnswer:
    """A whole answer.

    Attributes:
        said: The JSON in it; None where it has none.
        date: The server's Date header.
        retry_after_s: What Retry-After says; 0 where it says nothing.
    """

    status: int
    said: Any
    date: str
    retry_after_s: float

    @property
    def words(self) -> str:
        """Title, detail and field of a problem document, or the status alone."""
        if not isinstance(self.said, dict) or "title" not in self.said:
            return f"status {self.status}"
        field = f" (field {self.said['field']})" if self.said.get("field") else ""
        return f"{self.said['title']}{field}: {self.said.get('detail', '')}".rstrip(": ")

    @property
    def field(self) -> str:
        """The field that a problem document names."""
        return str(self.said.get("field") or "") if isinstance(self.said, dict) else ""


class Door:
    """A kept connection.

    Args:
        address: ``http://host:port`` or ``https://…``.
        ca_file: Certificates to trust beside the system's, for a laboratory's own authority.
        timeout_s: Patience for each step.
    """

    def __init__(self, address: str, ca_file: str = "", timeout_s: float = 20.0) -> None:
        self.parts = urllib.parse.urlsplit(address)
        self.address, self.ca_file, self.timeout_s = address, ca_file, timeout_s
        self._connection: http.client.HTTPConnection | None = None

    def post(self, content: bytes, headers: Mapping[str, str], key: str) -> DoorAnswer:
        """Send one body.

        Raises:
            DoorAway: No whole answer came.
        """
        return self._ask("POST", content, {**headers, "Authorization": f"Bearer {key}"})

    def knock(self) -> DoorAnswer:
        """See whether a station door is there: it answers 405 to anything but POST.

        Raises:
            DoorAway: No whole answer came.
        """
        return self._ask("GET", None, {})

    def close(self) -> None:
        """Close the connection; the next call opens a new one."""
        if self._connection is not None:
            self._connection.close()
            self._connection = None

    def _ask(self, method: str, content: bytes | None, headers: Mapping[str, str]) -> DoorAnswer:
        is_fresh = self._connection is None
        try:
            if self._connection is None:
                self._connection = self._new_connection()
            self._connection.request(method, PATH, content, dict(headers))
            answer = self._connection.getresponse()
            body = answer.read()
        except (OSError, http.client.HTTPException) as error:
            self.close()
            if not is_fresh and isinstance(error, (http.client.RemoteDisconnected, ConnectionError)):
                return self._ask(method, content, headers)  # the server closed an idle connection; sending twice is harmless
            raise DoorAway(_away_words(error, self.address)) from error
        return DoorAnswer(answer.status, _json_of(body), answer.headers.get("Date", ""),
                          _seconds(answer.headers.get("Retry-After")))

    def _new_connection(self) -> http.client.HTTPConnection:
        assert self.parts.hostname is not None
        if self.parts.scheme == "http":
            return http.client.HTTPConnection(self.parts.hostname, self.parts.port or 80, timeout=self.timeout_s)
        context = ssl.create_default_context()
        if self.ca_file:
            context.load_verify_locations(self.ca_file)
        return http.client.HTTPSConnection(self.parts.hostname, self.parts.port or 443, timeout=self.timeout_s, context=context)


def _json_of(body: bytes) -> Any:
    try:
        return json.loads(body)
    except ValueError:
        return None


def _seconds(text: str | None) -> float:
    try:
        return max(0.0, float(text or 0))
    except ValueError:
        return 0.0


def _away_words(error: Exception, address: str) -> str:
    """Where it ended, and what to look at."""
    if isinstance(error, ssl.SSLCertVerificationError):
        return (f"the certificate of {address} is not trusted ({error.verify_message}); set ca_file to the certificate of your "
                "laboratory's authority, or correct the PC's clock")
    if isinstance(error, ssl.SSLError):
        return f"{address} does not speak TLS here ({error.reason}); perhaps the address begins with http://"
    if isinstance(error, ConnectionRefusedError):
        return f"nobody listens at {address}; is labmon running, and is the port right?"
    if isinstance(error, (TimeoutError, socket.timeout)):
        return f"{address} does not answer in time; is the network up, and does a firewall stand between?"
    if isinstance(error, socket.gaierror):
        return f"the name in {address} is not known; check its spelling, or write the number of the machine"
    if isinstance(error, FileNotFoundError):
        return "the ca_file of the settings is not there; correct its path"
    return f"{address} gave no whole answer ({error!r}); is this labmon's address, and is the network up?"



# ---- clock -----------------------------------------------------------------------------------------------
# The clocks of a bench PC: wall time, time since power-up, and what keeps the wall clock right.

EARLIEST_US = 1_577_836_800_000_000
"""2020: an earlier wall clock was never set."""
_SAME_POWER_UP_S = 60


def now_us() -> int:
    """Wall time, microseconds since 1970, as the PC has it."""
    return time.time_ns() // 1000


def uptime_ms() -> int:
    """Time since the PC's power-up, ms; goes on while it sleeps where the system can tell."""
    if hasattr(time, "CLOCK_BOOTTIME"):
        return time.clock_gettime_ns(time.CLOCK_BOOTTIME) // 1_000_000
    return time.monotonic_ns() // 1_000_000


def power_up() -> str:
    """A name for this run of the PC: readings of the same one share the uptime axis, also after the client restarts."""
    try:
        return "id " + Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
    except OSError:
        return f"about {now_us() // 1_000_000 - uptime_ms() // 1000}"


def is_same_power_up(one: str, other: str) -> bool:
    """Whether two names mean one run of the PC; where the system has no name of its own, by the moment of power-up."""
    kind, _, first = one.partition(" ")
    other_kind, _, second = other.partition(" ")
    if kind == other_kind == "about":
        return abs(int(first) - int(second)) <= _SAME_POWER_UP_S
    return one == other


def clock_source() -> str:
    """What keeps the wall clock right, in the system's own words; "unknown" where it does not say."""
    if sys.platform == "win32":
        return _said(["w32tm", "/query", "/source"]) or "unknown"
    if sys.platform == "darwin":
        return "unknown"
    is_synchronized = {"yes": "synchronized", "no": "not synchronized"}
    return is_synchronized.get(_said(["timedatectl", "show", "--property=NTPSynchronized", "--value"]), "unknown")


def _said(command: list[str]) -> str:
    try:
        return subprocess.run(command, capture_output=True, text=True, timeout=10, check=True).stdout.strip()
    except (OSError, subprocess.SubprocessError, UnicodeDecodeError):
        return ""



# ---- reading ---------------------------------------------------------------------------------------------
# One reading as a source gives it: raw numbers by column name, and when they were measured.

NO_NUMBER = 9.9e37
"""SCPI-1999, vol. 1, 7.2.1: 9.9e37 stands for infinity and 9.91e37 for "not a number" (from memory)."""
_BETWEEN = re.compile(r"[,;\s]+")


@dataclass(frozen=True)
class Reading:
    """Raw values of one tap at one instant.

    Attributes:
        tap: Short name of the tap.
        at_us: Wall time, microseconds since 1970, as the PC's clock (or the file) has it.
        uptime_ms: Time since the PC's power-up, ms; None for a time that came with the line.
        values: Raw number by column name, in the tap's unit; None where the source gave none.
        more: Columns that the door keeps as they come (health of the client).
    """

    tap: str
    at_us: int
    uptime_ms: int | None
    values: Mapping[str, float | None]
    more: Mapping[str, Any] = field(default_factory=dict)


def reading_now(tap: str, values: Mapping[str, float | None]) -> Reading:
    """A reading measured at this moment."""
    return Reading(tap, now_us(), uptime_ms(), values)


def number_of(text: str, decimal: str = ".") -> float | None:
    """The number that a text says; None where it says there is none (empty, nan, infinite, SCPI's marks).

    Raises:
        ValueError: It is no number.
    """
    text = text.strip().strip('"').strip()
    if not text:
        return None
    if decimal != ".":
        if "." in text:
            raise ValueError(f"{text!r} has a point, though decimal = {decimal}")
        text = text.replace(decimal, ".")
    if "_" in text:
        raise ValueError(f"{text!r} is no number")
    number = float(text)
    return number if math.isfinite(number) and abs(number) < NO_NUMBER else None


def values_of_line(line: str, columns: Sequence[str]) -> dict[str, float | None]:
    """The numbers of a line such as ``0.998, 0.0011`` by column; ``-`` as a column's name leaves its number out.

    Raises:
        ValueError: Not one number for each column.
    """
    parts = [part for part in _BETWEEN.split(line.strip()) if part]
    if len(parts) != len(columns):
        raise ValueError(f"{line.strip()[:80]!r} has {len(parts)} numbers, not {len(columns)} ({' '.join(columns)})")
    try:
        return {name: number_of(part) for name, part in zip(columns, parts) if name != "-"}
    except ValueError as error:
        raise ValueError(f"{line.strip()[:80]!r} is no line of numbers") from error



# ---- spool -----------------------------------------------------------------------------------------------
# Readings on disk until the door has acknowledged them: one SQLite file, bounded in bytes, one owner.
#
# A row leaves for two reasons only: the door acknowledged it, or the bound was reached; then the oldest go, and the gap is
# written down in the same transaction.

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



# ---- version ---------------------------------------------------------------------------------------------
# The client's version, as the door gets to know it.

VERSION = "0.1.0"
FIRMWARE = f"labmon-bench {VERSION}"



# ---- message ---------------------------------------------------------------------------------------------
# What is said to the door, and what its answer means (CONTRACT 1).

_PACKED_FROM_BYTES = 1_000


class AnswerFault(Exception):
    """The answer is not of the form that the door promises."""


def message(boot: Boot, columns: Sequence[Columns], told: Mapping[str, Any] | None = None) -> dict[str, Any]:
    """One body; ``now`` is the moment of this call, so make it anew for each attempt.

    Readings from before the PC's last power-up keep their uptimes (their content must not change), but ``now.uptime_ms`` is
    left out: the two do not count from the same moment. ``told`` is how the client itself does.
    """
    now: dict[str, Any] = {"at": now_us()}
    if is_same_power_up(boot.power_up, power_up()):
        now["uptime_ms"] = uptime_ms()
    said: dict[str, Any] = {"boot": boot.name, "now": now, "firmware": FIRMWARE}
    if told is not None:
        said["client"] = dict(told)
    return {**said, "taps": {part.tap: _columns_sent(part) for part in columns}}


def packed(body: Mapping[str, Any]) -> tuple[bytes, dict[str, str]]:
    """Bytes and headers."""
    content = json.dumps(body, separators=(",", ":")).encode()
    headers = {"Content-Type": "application/json"}
    if len(content) >= _PACKED_FROM_BYTES:
        content, headers["Content-Encoding"] = gzip.compress(content, 1), "gzip"
    return content, headers


def accepted_ranges(answer: Any, boot: Boot) -> dict[str, list[tuple[int, int]]]:
    """The closed ranges of numbers that an answer 200 acknowledges, by tap.

    Raises:
        AnswerFault: It is not such an answer; then nothing may be forgotten.
    """
    try:
        accepted = answer["accepted"]
        if accepted["boot"] != boot.name:
            raise AnswerFault(f"the answer is for boot {accepted['boot']!r}, sent was {boot.name!r}")
        return {tap: [(int(first), int(last)) for first, last in ranges] for tap, ranges in accepted["ranges"].items()}
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise AnswerFault(f"the answer does not say what is accepted: {str(answer)[:200]}") from error


def _columns_sent(part: Columns) -> dict[str, list[Any]]:
    made: dict[str, list[Any]] = {"sequence": part.sequence, "at": part.at_us}
    if any(uptime is not None for uptime in part.uptime_ms):
        made["uptime_ms"] = part.uptime_ms
    made.update(zip(part.names, part.values))
    if any(part.more):
        rows = [json.loads(more) if more else {} for more in part.more]
        made.update({name: [row.get(name) for row in rows] for name in sorted({name for row in rows for name in row})})
    return made



# ---- entries ---------------------------------------------------------------------------------------------
# Entries of a settings file with their lines, and everything that is wrong with them, told at once.

T = TypeVar("T")
_SECTION = re.compile(r"\[(?P<name>[^]]+)\]")
_KEY = re.compile(r"(?P<name>[^\s=:#;][^=:]*?)\s*[=:]")


class SettingsFault(Exception):
    """The settings cannot be used; each line names place, value and remedy."""


class Entries:
    """One INI file: sections of keys, each with the number of its line."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.faults: list[tuple[int, str]] = []
        parser = configparser.ConfigParser(interpolation=None, strict=True, delimiters=("=",), default_section="\0")
        try:
            text = path.read_text(encoding="utf-8-sig")
            parser.read_string(text)
        except OSError as error:
            raise SettingsFault(f"{path}: cannot be read ({error.strerror}); write the file, or name another one") from error
        except UnicodeDecodeError as error:
            raise SettingsFault(f"{path}: is no UTF-8 text; save it again as UTF-8") from error
        except configparser.Error as error:
            raise SettingsFault(_syntax_words(path, error)) from error
        self.sections = {name: dict(parser[name]) for name in parser.sections()}
        self.lines = _lines_of(text)

    def section(self, name: str) -> Section:
        """A section; an absent one is empty."""
        return Section(self, name, self.sections.get(name, {}))

    def fault(self, section: str, key: str, words: str) -> None:
        """Remember a fault; ``words`` say what is wrong and what to write."""
        line = self.lines.get((section, key)) or self.lines.get((section, "")) or 0
        value = self.sections.get(section, {}).get(key)
        shown = f" {key}" if value is None else f" {key} = {value.splitlines()[0] if value.splitlines() else ''}"
        self.faults.append((line, f"[{section}]{shown if key else ''}: {words}"))

    def finish(self) -> None:
        """All is read.

        Raises:
            SettingsFault: Something was wrong.
        """
        if self.faults:
            said = (f"{self.path.name} line {line}: {words}" if line else f"{self.path.name}: {words}"
                    for line, words in sorted(self.faults))
            raise SettingsFault("\n".join(said))


class Section:
    """Typed reading of one section; what is wrong is remembered and a default given, so that all faults come together."""

    def __init__(self, entries: Entries, name: str, found: dict[str, str]) -> None:
        self.entries, self.name, self.found = entries, name, found
        self.asked: set[str] = set()

    def fault(self, key: str, words: str) -> None:
        """Remember a fault of one of its keys."""
        self.entries.fault(self.name, key, words)

    def parsed(self, key: str, parse: Callable[[str], T], default: T, example: str) -> T:
        """A value by ``parse``, which raises ValueError with the reason."""
        self.asked.add(key)
        if key not in self.found:
            return default
        try:
            return parse(self.found[key].strip())
        except ValueError as error:
            self.fault(key, f"{error}; write for instance {key} = {example}")
            return default

    def text(self, key: str, default: str = "", *, example: str = "", is_needed: bool = False) -> str:
        """Text; a fault where it is needed and absent or empty."""
        self.asked.add(key)
        value = self.found.get(key, default).strip()
        if is_needed and not value:
            self.fault(key, f"is missing; write for instance {key} = {example}")
        return value

    def number(self, key: str, default: float, *, above: float, below: float = 1e9, example: str) -> float:
        """A number between two bounds."""
        return self.parsed(key, lambda text: _number_between(text, above, below), default, example)

    def is_on(self, key: str, default: bool) -> bool:
        """yes or no."""
        return self.parsed(key, _yes_or_no, default, "yes")

    def one_of(self, key: str, words: tuple[str, ...], default: str) -> str:
        """One of some words."""

        def parse(text: str) -> str:
            if text not in words:
                raise ValueError(f"is none of {', '.join(words)}")
            return text

        return self.parsed(key, parse, default, words[0])

    def pairs(self, key: str, example: str) -> list[tuple[str, str]]:
        """Lines of ``left: right``; at least one is needed."""
        text = self.text(key, is_needed=True, example=example)
        found = []
        for line in filter(None, map(str.strip, text.splitlines())):
            left, colon, right = line.partition(":")
            if not colon or not left.strip() or not right.strip():
                self.fault(key, f"the line {line!r} is not of the form name: text; write for instance {example}")
            else:
                found.append((left.strip(), right.strip()))
        return found

    def finish(self) -> None:
        """Nothing else is asked: what is left over is a fault."""
        for key in self.found:
            if key not in self.asked:
                near = difflib.get_close_matches(key, self.asked, 1)
                self.fault(key, f"is no entry of this section; {f'perhaps {near[0]} was meant' if near else 'take it out'}"
                                f" (known here: {', '.join(sorted(self.asked))})")


def _number_between(text: str, above: float, below: float) -> float:
    try:
        number = float(text)
    except ValueError:
        raise ValueError("is no number") from None
    if not above < number <= below:
        raise ValueError(f"is not above {above:g}" if number <= above else f"is more than {below:g}")
    return number


def _yes_or_no(text: str) -> bool:
    if text.lower() not in {"yes", "no"}:
        raise ValueError("is neither yes nor no")
    return text.lower() == "yes"


def _lines_of(text: str) -> dict[tuple[str, str], int]:
    """Line of each section ("" as key) and key."""
    lines: dict[tuple[str, str], int] = {}
    section = ""
    for number, line in enumerate(text.splitlines(), 1):
        if match := _SECTION.match(line):
            section = match["name"]
            lines.setdefault((section, ""), number)
        elif not line[:1].isspace() and (match := _KEY.match(line)):
            lines.setdefault((section, match["name"].lower()), number)
    return lines


def _syntax_words(path: Path, error: configparser.Error) -> str:
    if isinstance(error, configparser.MissingSectionHeaderError):
        return f"{path.name} line {error.lineno}: stands before any section; begin the file with the line [bench]"
    if isinstance(error, configparser.ParsingError):
        lines = "\n".join(f"{path.name} line {number}: {line} has no = sign; write key = value, or indent the line if it "
                          "goes on from the one above" for number, line in error.errors)
        return lines or f"{path.name}: {error}"
    if isinstance(error, configparser.DuplicateOptionError):
        return f"{path.name} line {error.lineno}: [{error.section}] {error.option}: stands twice; take one out"
    if isinstance(error, configparser.DuplicateSectionError):
        return f"{path.name} line {error.lineno}: [{error.section}]: stands twice; put its entries under one"
    return f"{path.name}: {error}"



# ---- settings --------------------------------------------------------------------------------------------
# What the user wants: one short INI file, read into frozen settings.

KEY_VARIABLE = "LABMON_BENCH_KEY"
_SHORT_NAME = re.compile(r"[a-z0-9][a-z0-9-]{0,62}")
_COLUMN = re.compile(r"[a-z][a-z0-9_]{0,63}")
_DELIMITERS = {"comma": ",", "semicolon": ";", "tab": "\t", "bar": "|", "blanks": " "}
_OFFSET = re.compile(r"([+-])(\d\d):(\d\d)")


@dataclass(frozen=True)
class Ask:
    """One query to an instrument and the columns that its answer fills."""

    columns: tuple[str, ...]
    query: str


@dataclass(frozen=True)
class InstrumentSettings:
    """An instrument that speaks SCPI, reached through VISA."""

    address: str
    backend: str
    ask: tuple[Ask, ...]
    at_open: tuple[str, ...]
    expect: str
    timeout_s: float
    baud: int
    ending: str


@dataclass(frozen=True)
class SerialSettings:
    """A board that writes lines of numbers to a serial port."""

    port: str
    baud: int
    columns: tuple[str, ...]


@dataclass(frozen=True)
class StdinSettings:
    """Another program that writes lines of numbers to our standard input."""

    columns: tuple[str, ...]


@dataclass(frozen=True)
class FunctionSettings:
    """A Python function of the user's that gives a map from column to number."""

    file: Path
    name: str


@dataclass(frozen=True)
class CsvSettings:
    """A table of text that another program goes on writing.

    Attributes:
        time_columns: Empty where lines have no time of their own and are stamped when seen.
        zone: None for the PC's own zone.
    """

    file: Path
    columns: tuple[tuple[str, str], ...]
    delimiter: str
    decimal: str
    encoding: str
    skip_lines: int
    has_header: bool
    time_columns: tuple[str, ...]
    time_format: str
    zone: tzinfo | None
    is_from_start: bool


SourceSettings = Union[InstrumentSettings, SerialSettings, StdinSettings, FunctionSettings, CsvSettings]


@dataclass(frozen=True)
class TapSettings:
    """One tap: its name at the door, and where its readings come from."""

    tap: str
    source: SourceSettings
    read_every_s: float


@dataclass(frozen=True)
class BenchSettings:
    """Everything in the settings file."""

    path: Path
    door: str
    key_file: Path | None
    key: str
    ca_file: str
    spool: Path
    spool_mb: float
    send_every_s: float
    timeout_s: float
    mains_hz: float
    log_file: Path | None
    is_health_reported: bool
    taps: tuple[TapSettings, ...]


def read_settings(path: Path) -> BenchSettings:
    """The settings of a file; relative paths in it count from its folder.

    Raises:
        SettingsFault: Everything that is wrong, one line each.
    """
    path = path.absolute()
    entries = Entries(path)
    for name in entries.sections:
        if name != "bench" and not name.startswith("tap "):
            entries.fault(name, "", "is no section; write [bench] or [tap NAME]")
    taps = tuple(_tap_settings(entries.section(name), path.parent) for name in entries.sections if name.startswith("tap "))
    if not taps:
        entries.fault("bench", "", "no tap is named; add a section such as [tap eom-in]")
    if sum(isinstance(tap.source, StdinSettings) for tap in taps) > 1:
        entries.fault("bench", "", "two taps read standard input; there is only one")
    settings = _bench(entries.section("bench"), path, taps)
    entries.finish()
    return settings


def station_key(settings: BenchSettings) -> str:
    """The station's key as it is now; read anew each time, so that a new key needs no restart.

    Raises:
        SettingsFault: The key file cannot be read or is empty.
    """
    if settings.key_file is None:
        return settings.key
    try:
        key = settings.key_file.read_text(encoding="utf-8-sig").strip()
    except (OSError, UnicodeDecodeError) as error:
        raise SettingsFault(f"key_file {settings.key_file}: cannot be read ({error}); write the station's key into it") from error
    if not key or not key.isascii() or len(key.split()) != 1:
        raise SettingsFault(f"key_file {settings.key_file}: holds no key; write the station's key into it and nothing else")
    return key


def _bench(section: Section, path: Path, taps: tuple[TapSettings, ...]) -> BenchSettings:
    key = section.text("key") or os.environ.get(KEY_VARIABLE, "").strip()
    key_file = section.text("key_file")
    if not key and not key_file:
        section.fault("key_file", f"is missing; write the station's key into a file that only you can read and name it, as in "
                                  f"key_file = station.key (or set {KEY_VARIABLE})")
    log_file = section.text("log_file")
    settings = BenchSettings(
        path=path, door=section.parsed("door", _door_address, "", "http://192.0.2.10:8000"), key=key,
        key_file=path.parent / key_file if key_file else None, ca_file=section.text("ca_file"),
        spool=path.parent / section.text("spool", path.stem + ".spool"),
        spool_mb=section.number("spool_mb", 500.0, above=0.099, below=1e6, example="500"),
        send_every_s=section.number("send_every_s", 1.0, above=0.0, below=3600.0, example="1"),
        timeout_s=section.number("timeout_s", 20.0, above=0.0, below=600.0, example="20"),
        mains_hz=section.number("mains_hz", 50.0, above=-1e-9, below=1000.0, example="50"),
        log_file=path.parent / log_file if log_file else None,
        is_health_reported=section.is_on("report_health", True), taps=taps)
    if "door" not in section.found:
        section.fault("door", "is missing; write labmon's address, as in door = http://192.0.2.10:8000")
    section.finish()
    return settings


def _door_address(text: str) -> str:
    parts = urllib.parse.urlsplit(text)
    if parts.scheme not in {"http", "https"} or not parts.hostname:
        raise ValueError("is no address that begins with http:// or https://")
    if parts.port is not None and not 0 < parts.port < 65536:  # .port raises ValueError of its own for text
        raise ValueError("has no port between 1 and 65535")
    if parts.path.strip("/") or parts.query:
        raise ValueError("has a path; the client adds it by itself")
    return f"{parts.scheme}://{parts.netloc}"


def _tap_settings(section: Section, folder: Path) -> TapSettings:
    tap = section.name[4:].strip()
    if not _SHORT_NAME.fullmatch(tap):
        section.fault("", f"{tap!r} is no tap's name; use small letters, digits and hyphens, as on the station's page")
    makers = {"instrument": _instrument_settings, "serial": _serial, "csv": _csv, "function": _function, "stdin": _stdin}
    kind = section.one_of("source", tuple(makers), "")
    if "source" not in section.found:
        section.fault("source", f"is missing; write source = and one of {', '.join(makers)}")
    every_s = 1.0 if kind in {"serial", "stdin"} else section.number("read_every_s", 1.0, above=0.0, below=86_400.0, example="1")
    if kind not in makers:
        return TapSettings(tap, StdinSettings(()), every_s)
    source = makers[kind](section, folder)
    section.finish()
    return TapSettings(tap, source, every_s)


def _instrument_settings(section: Section, folder: Path) -> InstrumentSettings:
    asks = tuple(Ask(_columns(section, "ask", left), right) for left, right in section.pairs("ask", "port1 port2: READ?"))
    names = [name for ask in asks for name in ask.columns if name != "-"]
    if len(set(names)) < len(names):
        section.fault("ask", "fills a column twice; name each column once")
    backend = section.text("backend")
    if backend.endswith("@sim"):
        backend = f"{folder / backend[:-4]}@sim"
    endings = {"lf": "\n", "cr": "\r", "crlf": "\r\n"}
    return InstrumentSettings(
        address=section.text("address", is_needed=True, example="TCPIP0::192.0.2.20::5025::SOCKET"), backend=backend, ask=asks,
        at_open=tuple(filter(None, map(str.strip, section.text("at_open", "*CLS").splitlines()))),
        expect=section.text("expect"), timeout_s=section.number("timeout_s", 5.0, above=0.0, below=600.0, example="5"),
        baud=int(section.number("baud", 9600, above=0, example="9600")),
        ending=endings[section.one_of("ending", tuple(endings), "lf")])


def _serial(section: Section, folder: Path) -> SerialSettings:
    port = section.text("port", is_needed=True, example="COM3 or /dev/ttyUSB0")
    return SerialSettings(port, int(section.number("baud", 115_200, above=0, example="115200")), _line_columns(section))


def _stdin(section: Section, folder: Path) -> StdinSettings:
    return StdinSettings(_line_columns(section))


def _function(section: Section, folder: Path) -> FunctionSettings:
    file, _, name = section.text("function", is_needed=True, example="ports.py:read_ports").rpartition(":")
    if section.found.get("function") and not (file and name.isidentifier()):
        section.fault("function", "is not of the form file.py:name; write for instance function = ports.py:read_ports")
    return FunctionSettings(folder / file, name)


def _csv(section: Section, folder: Path) -> CsvSettings:
    file = section.text("file", is_needed=True, example="C:\\logs\\power.csv")
    columns = tuple((_columns(section, "columns", left)[0], right) for left, right in section.pairs("columns", "port1: Power A"))
    times = tuple(filter(None, map(str.strip, section.text("time").split("+"))))
    has_header = section.is_on("header", True)
    if not has_header and not all(place.isdigit() and int(place) > 0 for _, place in columns):
        section.fault("columns", "names columns, but header = no; number them from 1, as in port1: 3")
    if not has_header and not all(place.isdigit() for place in times):
        section.fault("time", "names columns, but header = no; number them from 1, as in time = 1")
    is_from_start = section.one_of("begin", ("now", "start"), "now") == "start"
    if is_from_start and not times:
        section.fault("begin", "asks for old lines, which need a time of their own; name the time column, as in time = Time")
    return CsvSettings(
        file=folder / file, columns=columns, delimiter=section.parsed("delimiter", _delimiter, ",", "semicolon"),
        decimal=section.one_of("decimal", (".", ","), "."), encoding=section.parsed("encoding", _encoding, "utf-8", "cp1252"),
        skip_lines=int(section.number("skip_lines", 0, above=-1e-9, example="3")), has_header=has_header,
        time_columns=times, time_format=section.text("time_format", "iso"),
        zone=section.parsed("time_zone", _zone, None, "utc"), is_from_start=is_from_start)


def _columns(section: Section, key: str, text: str) -> tuple[str, ...]:
    names = tuple(text.replace(",", " ").split())
    for name in names:
        if name != "-" and not _COLUMN.fullmatch(name):
            section.fault(key, f"{name!r} is no column; use the names of docs/payload.md, such as port1, port2, temperature_c")
    return names


def _line_columns(section: Section) -> tuple[str, ...]:
    text = section.text("columns", is_needed=True, example="port1 port2")
    return _columns(section, "columns", text)


def _delimiter(text: str) -> str:
    made = _DELIMITERS.get(text, text)
    if len(made) != 1:
        raise ValueError(f"is neither one character nor one of {', '.join(_DELIMITERS)}")
    return made


def _encoding(text: str) -> str:
    try:
        "7".encode(text)
    except LookupError:
        raise ValueError("is no encoding that Python knows") from None
    if "7".encode(text) != b"7":
        raise ValueError("uses more than one byte for a digit, which a growing file cannot be followed by")
    return text


def _zone(text: str) -> tzinfo | None:
    if text == "local":
        return None
    if text == "utc":
        return timezone.utc
    match = _OFFSET.fullmatch(text)
    if not match or int(match[2]) > 15 or int(match[3]) > 59:
        raise ValueError("is none of local, utc and an offset such as +01:00")
    offset = timedelta(hours=int(match[2]), minutes=int(match[3]))
    return timezone(-offset if match[1] == "-" else offset)



# ---- store -----------------------------------------------------------------------------------------------
# All that waits to be sent: the spool on disk, and memory where the disk refuses.

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



# ---- sender ----------------------------------------------------------------------------------------------
# Sends what waits, the oldest first, until the door has acknowledged it.

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



# ---- csv_time --------------------------------------------------------------------------------------------
# The time of a line in somebody else's file.

_ISO = re.compile(r"(\d{4})-(\d\d)-(\d\d)[T ](\d\d):(\d\d)(?::(\d\d)(?:[.,](\d{1,9}))?)?\s*(Z|z|[+-]\d\d:?\d\d)?")
_EPOCH = datetime(1970, 1, 1, tzinfo=timezone.utc)


def line_time(text: str, form: str, zone: tzinfo | None) -> int:
    """Microseconds since 1970 of a text.

    Args:
        form: ``iso``, ``unix`` (seconds since 1970) or date codes such as ``%d.%m.%Y %H:%M:%S``.
        zone: For times without one; None for the PC's.
    Raises:
        ValueError: It is no time, not one time (the hour that clocks are turned back), or lies before 2020.
    """
    if form == "unix":
        at_us = round(float(text.replace(",", ".")) * 1e6)
    else:
        at_us = (_in_zone(_parsed(text, form), zone) - _EPOCH) // timedelta(microseconds=1)
    if at_us < EARLIEST_US:
        raise ValueError(f"{text!r} lies before 2020: its clock was not set; read such files in on the station's page")
    return at_us


def _parsed(text: str, form: str) -> datetime:
    if form != "iso":
        return datetime.strptime(text, form)  # noqa: DTZ007  the zone comes later
    match = _ISO.fullmatch(text)
    if not match:
        raise ValueError(f"{text!r} is no ISO 8601 time; write time_format with date codes, such as %d.%m.%Y %H:%M:%S")
    year, month, day, hour, minute, second = (int(part or 0) for part in match.groups()[:6])
    made = datetime(year, month, day, hour, minute, second, int((match[7] or "0").ljust(6, "0")[:6]))  # noqa: DTZ001
    return made if match[8] is None else made.replace(tzinfo=datetime.strptime(match[8].upper(), "%z").tzinfo)


def _in_zone(at: datetime, zone: tzinfo | None) -> datetime:
    if at.tzinfo is not None:
        return at
    if zone is not None:
        return at.replace(tzinfo=zone)
    first, second = at.replace(fold=0).astimezone(), at.replace(fold=1).astimezone()
    if first != second:
        raise ValueError(f"{at} happened twice or never, since the clocks were changed; let the file's writer use UTC and set "
                         "time_zone = utc, or read this hour in on the station's page")
    return first



# ---- source ----------------------------------------------------------------------------------------------
# What every source of readings has, and what it says when it has none.


class SourceFault(Exception):
    """The source gives nothing now ("mute"): what was seen, and what a person can do."""


class OddLine(SourceFault):
    """One line is not as the settings say; the source itself goes on."""


class SourceEnded(Exception):
    """Nothing will ever come from this source again."""


class Source(Protocol):
    """One tap's source; used by one thread, one call at a time."""

    is_awaited: bool
    """``read`` waits by itself for what comes; otherwise it is called at set times."""

    def read(self) -> tuple[list[Reading], Place | None]:
        """What is new, and how far that goes where the source can be read again.

        Raises:
            SourceFault: It gives nothing; call again later.
            SourceEnded: It is over.
        """
        ...

    def kept(self) -> None:
        """What ``read`` gave last is kept; go on from there."""
        ...

    def close(self) -> None:
        """Leave the source; the next ``read`` opens it again."""
        ...



# ---- csv_file --------------------------------------------------------------------------------------------
# A table of text that another program goes on writing: what is new in it, told by content, never by place alone.
#
# The place is an offset with digests of what stands before it. Where they no longer fit, the file was rotated, cut or written
# anew: the rest of the old one is looked for beside it, then the file is read from its start, and lines seen before are left
# out. The file is never held open, so its writer may rename it at any instant: what was read counts only if the files beside
# it had the same names before and after.

_HEAD_BYTES = 1_024
_TAIL_BYTES = 4_096
_AT_ONCE_BYTES = 256 << 10
_LOOKS = 3
"""How often a folder is looked at anew, where files were renamed while it was looked at, before it is left for the next time."""
_PACKED = {".gz", ".bz2", ".xz", ".zip", ".zst"}


@dataclass(frozen=True)
class _Point:
    """How far a file is read.

    Attributes:
        head, tail: Digests of the first and the last bytes before ``offset``.
        file_number: The system's number of the file.
        lines: Lines read before the first row; ``names``: its header.
        is_again: It is read from its start, and lines of it may have been seen.
        is_skipped: What stands there is only noted as seen (``begin = now``).
    """

    path: str
    offset: int = 0
    head: str = ""
    tail: str = ""
    lines: int = 0
    names: Sequence[str] = field(default_factory=tuple)
    file_number: int = 0
    is_again: bool = True
    is_skipped: bool = False


class CsvFile:
    """One tap's growing file.

    Args:
        store: Where places are kept.
    """

    is_awaited = False

    def __init__(self, tap: str, settings: CsvSettings, store: Store) -> None:
        self.tap, self.settings, self.store = tap, settings, store
        self.source = f"csv {tap} {settings.file}"
        state = store.place(self.source)
        self._point = None if state is None else _Point(**state)
        if self._point is not None and self._point.is_again:
            self._point = _Point(self._point.path, file_number=self._point.file_number, is_skipped=self._point.is_skipped)
        self._passed: Counter[bytes] = Counter()
        self._is_watched = False
        self._next: tuple[_Point, Counter[bytes], bool] | None = None
        self._odd: list[str] = []

    def read(self) -> tuple[list[Reading], Place | None]:
        """New rows, up to a quarter of a megabyte of lines at a time."""
        if self._odd:
            odd, self._odd = self._odd, []
            raise OddLine(f"{len(odd)} lines of {self.settings.file.name} were left out, the first: {odd[0]}")
        kept = self._is_watched, self._passed
        for turn in range(_LOOKS):
            names = self._names()
            try:
                found = self._look()
            except SourceFault:
                if self._names() == names or turn == _LOOKS - 1:
                    raise
            else:
                if self._names() == names:
                    return found
            self._is_watched, self._passed = kept
            self._next, self._odd = None, []
        return [], None

    def _look(self) -> tuple[list[Reading], Place | None]:
        """New rows, right only if no file is renamed meanwhile."""
        current = self._current()
        if self._point is None:
            return self._read_on(_Point(str(current), is_skipped=not self.settings.is_from_start))
        point = self._found_again(self._point)
        if point is not None:
            readings, place = self._read_on(point)
            if place is not None or Path(point.path) == current:
                return readings, place
            current = self._following(Path(point.path), current)
        self._passed = Counter()
        return self._read_on(_Point(str(current)))

    def kept(self) -> None:
        """Go on behind what was read."""
        if self._next is not None:
            self._point, self._passed, self._is_watched = self._next
            self._next = None

    def close(self) -> None:
        """The file is never held open."""

    def _current(self) -> Path:
        """The file that is written now: of several that fit the name's pattern, the one written last."""
        file = self.settings.file
        try:
            return max((path for path in _fitting(file) if path.is_file()), key=lambda path: (path.stat().st_mtime_ns, path.name))
        except (OSError, ValueError):
            raise SourceFault(f"{file} is not there; is its writer running, and is the path right?") from None

    def _following(self, path: Path, current: Path) -> Path:
        """The file that was begun after one that is read to its end: the writer may have begun several since."""
        if not self.settings.time_columns:
            return current
        try:
            others = [other for other in [*self._beside(path), *_fitting(self.settings.file)] if other != path]
            later = [(other.stat().st_mtime_ns, other.name, other) for other in others
                     if other.stat().st_mtime_ns > path.stat().st_mtime_ns]
        except OSError:
            return current
        return min(later)[2] if later else current

    def _found_again(self, point: _Point) -> _Point | None:
        """The point in its file, or in the file's new name; None where what was read stands nowhere."""
        path = Path(point.path)
        found = [place for place in [path, *self._beside(path)] if _stands_in(place, point)]
        same = [place for place in found if _file_number(place) == point.file_number]
        if same:  # decides where a header is all there is
            return replace(point, path=str(same[0]))
        if not point.offset:  # stands in every file
            found = [place for place in found if place == path]
        return replace(point, path=str(found[0])) if found else None

    def _names(self) -> dict[str, int]:
        """The files that rotation concerns, by name, each with the system's number."""
        file = self.settings.file
        try:
            with os.scandir(file.parent) as entries:
                return {entry.name: entry.inode() for entry in entries if entry.name.startswith(_stem(file))
                        and (file.suffix in Path(entry.name).suffixes or fnmatch.fnmatch(entry.name, file.name))}
        except OSError:
            return {}

    def _beside(self, path: Path) -> list[Path]:
        """Files that rotation may have made: ``power.csv.1``, ``power-2.csv``, ``power.1.csv``."""
        file, stem = self.settings.file, _stem(self.settings.file)
        return sorted(other for other in file.parent.glob("*") if other != path and other.name.startswith(stem)
                      and file.suffix in other.suffixes and other.suffix not in _PACKED and other.is_file())

    def _read_on(self, point: _Point) -> tuple[list[Reading], Place | None]:
        """Rows of whole lines behind a point; no place where nothing changes."""
        path = Path(point.path)
        try:
            with path.open("rb") as file:
                file.seek(point.offset)
                found = file.read(_AT_ONCE_BYTES)
                whole = found[:found.rfind(b"\n") + 1]
                head, tail = _digests(file, point.offset + len(whole))
                number = os.fstat(file.fileno()).st_ino  # of the file that was read, whatever has its name by now
        except OSError as error:
            raise SourceFault(f"{path} cannot be read ({error.strerror}); may this user read it?") from error
        is_end = len(found) < _AT_ONCE_BYTES
        if not whole and not is_end:
            raise SourceFault(f"{path} has a line of more than {_AT_ONCE_BYTES >> 10} kB; is it a text file?")
        if not whole and not point.is_again:
            self._is_watched = self._is_watched or is_end
            return [], None
        rows, after = self._rows(whole, replace(point, offset=point.offset + len(whole), head=head, tail=tail,
                                                file_number=number))
        new, counts, passed = self._new_rows(rows, point)
        readings = self._readings(new, after)
        after = replace(after, is_again=point.is_again and not is_end, is_skipped=point.is_skipped and not is_end)
        self._next = after, passed, self._is_watched or is_end
        return readings, Place(self.source, vars(after), counts)

    def _rows(self, whole: bytes, point: _Point) -> tuple[list[bytes], _Point]:
        """The lines that are rows; what stands before them goes into the point."""
        rows, lines, names = [], point.lines, point.names
        before = self.settings.skip_lines + self.settings.has_header
        for line in whole.split(b"\n")[:-1]:
            if lines < before:
                lines += 1
                if lines == before and self.settings.has_header:
                    names = [name.strip() for name in self._cells(line)]
            elif line.strip():
                rows.append(line.rstrip(b"\r"))
        return rows, replace(point, lines=lines, names=names)

    def _new_rows(self, rows: list[bytes], point: _Point) -> tuple[list[bytes], dict[bytes, int], Counter[bytes]]:
        """Rows that are new, how often each has been seen then, and how often in this pass through the file."""
        passed = Counter(self._passed)
        if not self.settings.time_columns:
            is_known_time = self._is_watched and not point.is_skipped
            if rows and not is_known_time and not point.is_skipped:
                self._odd.append(f"{len(rows)} came while nobody watched and have no time of their own; name the time column")
            return (rows if is_known_time else []), {}, passed
        digests = [hashlib.blake2b(row, digest_size=8).digest() for row in rows]
        counts = Counter(self.store.lines_seen(self.source, digests))
        new = []
        for row, digest in zip(rows, digests):
            passed[digest] += point.is_again
            if not point.is_again or passed[digest] > counts[digest]:
                counts[digest] += 1
                new.append(row)
        return ([] if point.is_skipped else new), counts, passed if point.is_again else Counter()

    def _readings(self, rows: list[bytes], point: _Point) -> list[Reading]:
        readings = []
        for row in rows:
            try:
                readings.append(self._reading(self._cells(row), point.names))
            except ValueError as error:
                self._odd.append(f"{row[:80].decode(errors='replace')!r}: {error}")
        return readings

    def _reading(self, cells: list[str], names: Sequence[str]) -> Reading:
        values = {ours: number_of(_cell(cells, theirs, names), self.settings.decimal) for ours, theirs in self.settings.columns}
        if not self.settings.time_columns:
            return reading_now(self.tap, values)
        text = " ".join(_cell(cells, column, names).strip() for column in self.settings.time_columns)
        return Reading(self.tap, line_time(text, self.settings.time_format, self.settings.zone), None, values)

    def _cells(self, line: bytes) -> list[str]:
        text = line.decode(self.settings.encoding, "replace").lstrip("\ufeff").rstrip("\r")
        if self.settings.delimiter == " ":
            return text.split()
        return next(csv.reader([text], delimiter=self.settings.delimiter), [])


def _fitting(file: Path) -> list[Path]:
    """Files that a name or a pattern means."""
    return list(file.parent.glob(file.name)) if any(sign in file.name for sign in "*?[") else [file]


def _stem(file: Path) -> str:
    """What the names of all files begin with that rotation may make."""
    return file.name.split(".")[0].split("*")[0].split("?")[0].split("[")[0]


def _cell(cells: Sequence[str], column: str, names: Sequence[str]) -> str:
    """The cell of a named or numbered column.

    Raises:
        ValueError: There is none.
    """
    if column in names:
        place = names.index(column)
    elif column.isdigit() and int(column) > 0:
        place = int(column) - 1
    else:
        raise ValueError(f"the file has no column {column!r}; it has {', '.join(names)}")
    if place >= len(cells):
        raise ValueError(f"has {len(cells)} cells, none for {column!r}")
    return cells[place]


def _digests(file: IO[bytes], offset: int) -> tuple[str, str]:
    """Of the first and the last bytes before an offset."""
    file.seek(0)
    head = file.read(min(offset, _HEAD_BYTES))
    file.seek(max(0, offset - _TAIL_BYTES))
    tail = file.read(min(offset, _TAIL_BYTES))
    return hashlib.blake2b(head, digest_size=8).hexdigest(), hashlib.blake2b(tail, digest_size=8).hexdigest()


def _file_number(path: Path) -> int:
    """The system's number of a file, which renaming keeps; 0 where there is no file."""
    try:
        return path.stat().st_ino
    except OSError:
        return 0


def _stands_in(path: Path, point: _Point) -> bool:
    """Whether a file has what was read up to the point."""
    try:
        with path.open("rb") as file:
            is_long_enough = path.stat().st_size >= point.offset
            return is_long_enough and (not point.offset or _digests(file, point.offset) == (point.head, point.tail))
    except OSError:
        return False



# ---- function --------------------------------------------------------------------------------------------
# A Python function of the user's as a source.


class FunctionSource:
    """Calls ``name()`` of a file; it returns a map from column to number, or None where there is no reading now."""

    is_awaited = False

    def __init__(self, tap: str, settings: FunctionSettings) -> None:
        self.tap, self.settings = tap, settings
        self._function: Callable[[], Any] | None = None

    def read(self) -> tuple[list[Reading], Place | None]:
        """Call it once; the reading's time is the middle of the call."""
        place = f"{self.settings.file.name}:{self.settings.name}"
        try:
            if self._function is None:
                self._function = self._loaded()
            begun_us, begun_ms = now_us(), uptime_ms()
            found = self._function()
            taken_ms = uptime_ms() - begun_ms
        except SourceFault:
            raise
        except Exception as error:
            raise SourceFault(f"{place} failed with {error!r}; correct the function, and let it return None where there is no "
                              "reading") from error
        if found is None:
            return [], None
        if not isinstance(found, Mapping) or not found:
            raise SourceFault(f"{place} returned {str(found)[:80]!r}; let it return a map such as "
                              "{'port1': 1e-3, 'port2': 1e-6}")
        values = {str(name): _checked_number(place, name, value) for name, value in found.items()}
        return [Reading(self.tap, begun_us + 500 * taken_ms, begun_ms + taken_ms // 2, values)], None

    def kept(self) -> None:
        """A call cannot be made again."""

    def close(self) -> None:
        """Load the file anew at the next reading, so that a correction needs no restart."""
        self._function = None

    def _loaded(self) -> Callable[[], Any]:
        file, name = self.settings.file, self.settings.name
        spec = importlib.util.spec_from_file_location(f"bench_source_{file.stem}", file)
        if not file.is_file() or spec is None or spec.loader is None:
            raise SourceFault(f"{file} is not there or no Python file; correct function")
        module = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(module)
        found = getattr(module, name, None)
        if not callable(found):
            raise SourceFault(f"{file.name} has no function {name}; correct function")
        made: Callable[[], Any] = found
        return made


def _checked_number(place: str, name: object, value: Any) -> float | None:
    if value is None:
        return None
    try:
        number = float(value)
    except (TypeError, ValueError) as error:
        raise SourceFault(f"{place} returned {str(value)[:80]!r} for {name}; return a number, or None") from error
    return number if math.isfinite(number) else None



# ---- instrument ------------------------------------------------------------------------------------------
# An instrument that answers SCPI queries, over LAN, USB, GPIB or serial, through PyVISA.

IDENTIFY = "*IDN?"


class Link:
    """One open instrument; two taps of one instrument share it."""

    _shared: dict[tuple[str, str], Link] = {}

    def __init__(self, settings: InstrumentSettings) -> None:
        self.settings = settings
        self.lock = threading.Lock()
        self.identity = ""
        self._resource: Any = None
        self._faults = 0

    @classmethod
    def to(cls, settings: InstrumentSettings) -> Link:
        """The link to an address."""
        return cls._shared.setdefault((settings.backend, settings.address), Link(settings))

    def ask(self, query: str) -> str:
        """One answer.

        Raises:
            SourceFault: None came. The link is cleared and closed, since a late answer would be taken for that of the next query.
        """
        try:
            if self._resource is None:
                self._open()
            answer = str(self._resource.query(query)).strip()
        except SourceFault:
            raise
        except Exception as error:
            self._faults += 1
            self.close()
            raise SourceFault(self._words(query, error)) from error
        self._faults = 0
        return answer

    def close(self) -> None:
        """Clear and close; the next query opens again."""
        resource, self._resource = self._resource, None
        if resource is not None:
            for step in (resource.clear, resource.close):
                with contextlib.suppress(Exception):
                    step()

    def _open(self) -> None:
        try:
            import pyvisa
        except ImportError as error:
            raise SourceFault("PyVISA is not installed; run: pip install pyvisa pyvisa-py (and pyusb for USB, pyserial for "
                              "serial ports)") from error
        settings = self.settings
        options: dict[str, Any] = {"read_termination": settings.ending, "write_termination": settings.ending}
        if settings.address.upper().startswith("ASRL"):
            options["baud_rate"] = settings.baud
        resource = pyvisa.ResourceManager(settings.backend).open_resource(settings.address, **options)
        self._resource = resource
        resource.timeout = 1000.0 * settings.timeout_s
        with contextlib.suppress(Exception):
            resource.clear()  # not every kind of link has a device clear
        for command in settings.at_open:
            resource.write(command)
        self.identity = str(resource.query(IDENTIFY)).strip()
        if settings.expect not in self.identity:
            self.close()
            raise SourceFault(f"{settings.address} says it is {self.identity!r}, not {settings.expect!r}; exchange the "
                              "addresses, or correct expect")

    def _words(self, query: str, error: Exception) -> str:
        what = str(error).splitlines()[0] if str(error) else type(error).__name__
        words = f"{self.settings.address} is mute: no answer to {query} ({what}); it is opened anew at the next reading"
        if self._faults >= 3:
            return f"{words}. It failed {self._faults} times running: look at its cable and address, then switch it off and on"
        return words


class Instrument:
    """One tap's queries."""

    is_awaited = False

    def __init__(self, tap: str, settings: InstrumentSettings) -> None:
        self.tap, self.settings, self.link = tap, settings, Link.to(settings)

    def read(self) -> tuple[list[Reading], Place | None]:
        """Ask every query once; the reading's time is the middle of the asking."""
        values: dict[str, float | None] = {}
        with self.link.lock:
            begun_us, begun_ms = now_us(), uptime_ms()
            answers = [self.link.ask(ask.query) for ask in self.settings.ask]
            taken_ms = uptime_ms() - begun_ms
        for ask, answer in zip(self.settings.ask, answers):
            values.update(self._numbers(ask.query, answer, ask.columns))
        return [Reading(self.tap, begun_us + 500 * taken_ms, begun_ms + taken_ms // 2, values)], None

    def kept(self) -> None:
        """An instrument cannot be read again."""

    def close(self) -> None:
        """Leave the instrument."""
        with self.link.lock:
            self.link.close()

    def _numbers(self, query: str, answer: str, columns: tuple[str, ...]) -> dict[str, float | None]:
        parts = answer.replace(";", ",").split(",")
        try:
            if len(parts) != len(columns):
                raise ValueError(f"{len(parts)} values")
            return {name: number_of(part) for name, part in zip(columns, parts) if name != "-"}
        except ValueError as error:
            raise SourceFault(f"{self.settings.address} answered {answer[:80]!r} to {query}, which is not one number for each of "
                              f"{' '.join(columns)} ({error}); correct ask ( - leaves a number out)") from error



# ---- lines -----------------------------------------------------------------------------------------------
# Lines of numbers as they come: from a board on a serial port, or from another program.

_LONGEST_LINE = 10_000
_PATIENCE_S = 1.0


class SerialLines:
    """A board that writes a line of numbers for each reading."""

    is_awaited = True

    def __init__(self, tap: str, settings: SerialSettings) -> None:
        self.tap, self.settings = tap, settings
        self._port: Any = None
        self._part = b""
        self._is_whole = False

    def read(self) -> tuple[list[Reading], Place | None]:
        """The next line, or nothing within a second. What stands before the first line end may be cut and is left out."""
        try:
            if self._port is None:
                self._port, self._part, self._is_whole = self._opened(), b"", False
            self._part += self._port.readline()
        except OSError as error:  # pyserial's SerialException is one
            self.close()
            raise SourceFault(f"serial port {self.settings.port} gives nothing ({error}); is the board plugged in, and does no "
                              "other program use the port?") from error
        if not self._part.endswith(b"\n"):
            self._part = self._part[-_LONGEST_LINE:]
            return [], None
        line, self._part = self._part, b""
        was_whole, self._is_whole = self._is_whole, True
        return ([self._reading(line)] if was_whole else []), None

    def kept(self) -> None:
        """A line cannot be read again."""

    def close(self) -> None:
        """Leave the port."""
        if self._port is not None:
            self._port.close()
            self._port = None

    def _opened(self) -> Any:
        try:
            import serial
        except ImportError as error:
            raise SourceFault("pyserial is not installed; run: pip install pyserial") from error
        return serial.Serial(self.settings.port, self.settings.baud, timeout=_PATIENCE_S)

    def _reading(self, line: bytes) -> Reading:
        return _reading(self.tap, line.decode("ascii", "replace"), self.settings.columns)


class StandardInput:
    """Another program's lines: ``measure | labmon-bench run bench.ini``."""

    is_awaited = True

    def __init__(self, tap: str, settings: StdinSettings, stream: IO[str] | None = None) -> None:
        self.tap, self.settings = tap, settings
        self._next_line: Callable[[], str] = (stream or sys.stdin).readline

    def read(self) -> tuple[list[Reading], Place | None]:
        """The next line; waits for it."""
        line = self._next_line()
        if not line:
            raise SourceEnded("standard input has ended")
        return [_reading(self.tap, line, self.settings.columns)], None

    def kept(self) -> None:
        """A line cannot be read again."""

    def close(self) -> None:
        """The stream is not ours."""


def _reading(tap: str, line: str, columns: tuple[str, ...]) -> Reading:
    try:
        return reading_now(tap, values_of_line(line, columns))
    except ValueError as error:
        raise OddLine(f"{error}; correct columns, or what is written ( - leaves a number out)") from error



# ---- sources ---------------------------------------------------------------------------------------------
# The source that a tap's settings ask for, read at its times by a thread of its own.

log = logging.getLogger("labmon_bench")

LONGEST_PAUSE_S = 30.0
_AT_ONCE_S = 1e-6
_SAY_AGAIN_S = 600.0


def source_of(tap: TapSettings, store: Store) -> Source:
    """The source, not yet opened."""
    settings = tap.source
    if isinstance(settings, InstrumentSettings):
        return Instrument(tap.tap, settings)
    if isinstance(settings, SerialSettings):
        return SerialLines(tap.tap, settings)
    if isinstance(settings, CsvSettings):
        return CsvFile(tap.tap, settings, store)
    if isinstance(settings, FunctionSettings):
        return FunctionSource(tap.tap, settings)
    return StandardInput(tap.tap, settings)


@dataclass
class SourceState:
    """How a source does."""

    tap: str
    readings: int = 0
    odd_lines: int = 0
    mute_since_us: int | None = None
    trouble: str = ""
    is_ended: bool = False


class Reader:
    """Reads one source until told to stop.

    Args:
        keep: Keeps readings; raises StoreFault where it cannot.
        mains_hz: The instants of reading are spread over one cycle of the mains by chance, so that its hum does not show as
            a slow wave; 0 for none.
    """

    def __init__(self, tap: TapSettings, source: Source, keep: Callable[[Sequence[Reading], Place | None], None], *,
                 mains_hz: float, seed: int | None = None) -> None:
        self.tap, self.source, self.keep = tap, source, keep
        self.state = SourceState(tap.tap)
        self.cycle_s = 1.0 / mains_hz if mains_hz else 0.0
        self._random = random.Random(seed)
        self._failures = 0
        self._said: dict[str, float] = {}

    def run(self, stop: threading.Event) -> None:
        """Read at the set times, or as things come."""
        due_s = time.monotonic()
        while not stop.is_set() and not self.state.is_ended:
            pause_s = self.turn()
            if pause_s:
                stop.wait(pause_s)
            elif not self.source.is_awaited:
                late = max(0.0, time.monotonic() - due_s) // self.tap.read_every_s
                due_s += self.tap.read_every_s * (1 + late)
                shift_s = self._random.uniform(0.0, min(self.cycle_s, self.tap.read_every_s))
                stop.wait(max(0.0, due_s + shift_s - time.monotonic()))
        self.source.close()

    def turn(self) -> float:
        """Read once; seconds to pause beyond the usual."""
        try:
            readings, place = self.source.read()
            self._keep(readings, place)
            if place is not None:
                return _AT_ONCE_S  # there may be more of it
        except OddLine as fault:
            self.state.odd_lines += 1
            self._say("odd", str(fault))
            return 0.0
        except SourceFault as fault:
            self.source.close()
            return self._mute(str(fault))
        except StoreFault as fault:
            self._say("store", str(fault))
            return min(5.0, self.tap.read_every_s)
        except SourceEnded as end:
            log.warning("tap %s: %s", self.tap.tap, end)
            self.state.is_ended = True
        return 0.0

    def _keep(self, readings: Sequence[Reading], place: Place | None) -> None:
        if readings or place is not None:
            self.keep(readings, place)
            self.source.kept()
        if readings:
            self.state.readings += len(readings)
            if self.state.mute_since_us is not None:
                log.warning("tap %s: readings come again", self.tap.tap)
            self._failures, self.state.mute_since_us, self.state.trouble = 0, None, ""

    def _mute(self, why: str) -> float:
        """The client is alive, the source mute: say so, and try again after a longer and longer pause."""
        self._failures += 1
        if self.state.mute_since_us is None:
            self.state.mute_since_us = now_us()
        self.state.trouble = why
        self._say("mute", why)
        return min(LONGEST_PAUSE_S, 2.0 ** min(self._failures - 1, 10)) * self._random.uniform(0.5, 1.0)

    def _say(self, kind: str, words: str) -> None:
        """In the log at once, and every ten minutes while it lasts."""
        is_due = time.monotonic() - self._said.get(kind, -_SAY_AGAIN_S) >= _SAY_AGAIN_S
        if is_due or (kind == "mute" and self._failures in (1, 3)):
            self._said[kind] = time.monotonic()
            log.error("tap %s: %s", self.tap.tap, words)



# ---- health ----------------------------------------------------------------------------------------------
# How the client itself does: told to the door now and then, and to people in a status file.

_CLOCK_ASKED_EVERY_S = 600.0


class Health:
    """What is known of the client's own state."""

    def __init__(self, store: Store, tally: Tally, states: Sequence[SourceState], *, is_told: bool) -> None:
        self.store, self.tally, self.states, self.is_told = store, tally, states, is_told
        self.begun_us = now_us()
        self._clock, self._clock_s = "unknown", -_CLOCK_ASKED_EVERY_S

    def told(self) -> dict[str, Any] | None:
        """What the door is told of the client itself beside readings; None where the settings want it untold."""
        if not self.is_told:
            return None
        return {"waiting": self.store.waiting, "dropped": self.store.dropped, "restarts": self.store.starts - 1,
                "clock": self.clock(), "mute": [state.tap for state in self.states if state.mute_since_us is not None]}

    def clock(self) -> str:
        """What keeps the PC's clock right, asked every ten minutes."""
        if time.monotonic() - self._clock_s >= _CLOCK_ASKED_EVERY_S:
            self._clock, self._clock_s = clock_source(), time.monotonic()
        return self._clock

    def status(self) -> dict[str, Any]:
        """Everything, for a person or a script."""
        oldest_us = self.store.oldest_at_us()
        answered_s = self.tally.answered_s
        return {
            "version": VERSION, "process": os.getpid(), "at_us": now_us(), "uptime_ms": uptime_ms(),
            "running_since_us": self.begun_us,
            "boot": self.store.boot.name, "restarts": self.store.starts - 1, "clock": self._clock,
            "waiting": self.store.waiting, "oldest_waiting_us": oldest_us, "dropped": self.store.dropped,
            "gaps": [asdict(gap) for gap in self.store.gaps()[:20]], "spool_trouble": self.store.disk_fault,
            "stored": self.tally.stored, "known": self.tally.known, "set_aside": self.tally.set_aside,
            "answered_s_ago": None if answered_s is None else round(time.monotonic() - answered_s, 1),
            "door_trouble": self.tally.trouble, "taps": [asdict(state) for state in self.states]}


def status_path(spool: Path) -> Path:
    """Where the status file lies."""
    return spool.with_name(spool.name + ".status.json")


def write_status(path: Path, status: dict[str, Any]) -> None:
    """Whole or not at all; on a full disk the old one stays."""
    part = path.with_name(path.name + ".part")
    with contextlib.suppress(OSError):
        part.write_text(json.dumps(status, indent=1), encoding="utf-8")
        part.replace(path)


def status_words(status: dict[str, Any]) -> str:
    """The status for a person."""
    age_s = max(0, (now_us() - status["at_us"]) // 1_000_000)
    lines = [f"client {status['version']}, process {status['process']}, status {age_s} s old, restarts {status['restarts']}, "
             f"clock: {status['clock']}",
             f"{status['waiting']} readings wait, {status['dropped']} were dropped since the spool was made",
             f"door: {status['door_trouble'] or 'well'}; stored {status['stored']}, known {status['known']}, set aside "
             f"{status['set_aside']}"]
    if age_s > 30:
        lines.insert(0, "The client does not seem to run: its status is old.")
    if status["spool_trouble"]:
        lines.append(f"spool: {status['spool_trouble']}")
    for tap in status["taps"]:
        state = f"mute: {tap['trouble']}" if tap["mute_since_us"] else "ended" if tap["is_ended"] else "well"
        lines.append(f"tap {tap['tap']}: {state}; {tap['readings']} readings, {tap['odd_lines']} times odd lines")
    lines += [f"gap: tap {gap['tap']}, {gap['count']} readings ({gap['why']})" for gap in status["gaps"][:5]]
    return "\n".join(lines)



# ---- bench -----------------------------------------------------------------------------------------------
# The client at work: one thread a source, one that sends, and a look at all of them every few seconds.

log = logging.getLogger("labmon_bench")

_LOOK_EVERY_S = 0.5
_STATUS_EVERY = 10
"""Looks between two writings of the status file."""
_STOP_WITHIN_S = 5.0


class Bench:
    """Everything that one settings file asks for.

    Raises:
        SettingsFault: The spool cannot be used.
    """

    def __init__(self, settings: BenchSettings) -> None:
        self.settings = settings
        self.store = Store(settings.spool, int(settings.spool_mb * 2**20))
        door = Door(settings.door, settings.ca_file, settings.timeout_s)
        self.sender = Sender(self.store, door, lambda: station_key(settings), settings.send_every_s,
                             told=lambda: self.health.told())
        sources: list[Source] = [source_of(tap, self.store) for tap in settings.taps]
        self.readers = [Reader(tap, source, self.keep, mains_hz=settings.mains_hz) for tap, source in zip(settings.taps, sources)]
        self.health = Health(self.store, self.sender.tally, [reader.state for reader in self.readers],
                             is_told=settings.is_health_reported)

    def keep(self, readings: Sequence[Reading], place: Place | None) -> None:
        """Keep what a source gave."""
        self.store.keep(readings, place)

    def run(self, stop: threading.Event) -> None:
        """Work until told to stop, or until every source is over and everything is acknowledged."""
        log.info("%s starts: boot %s, start number %d, %d readings wait", FIRMWARE, self.store.boot.name, self.store.starts,
                 self.store.waiting)
        runs = [self.sender.run, *(reader.run for reader in self.readers)]
        threads = [threading.Thread(target=run, args=(stop,), daemon=True) for run in runs]
        for thread in threads:
            thread.start()
        status = status_path(self.settings.spool)
        looks = 0
        while not stop.wait(_LOOK_EVERY_S):
            looks += 1
            if looks % _STATUS_EVERY == 1:
                write_status(status, self.health.status())
            if dead := [thread for thread in threads if not thread.is_alive() and not self._is_over()]:
                if len(dead) > sum(reader.state.is_ended for reader in self.readers):
                    raise RuntimeError("a part of the client has died; see the lines above")
            if self._is_over() and not self.store.waiting:
                stop.set()
        for thread in threads:
            thread.join(_STOP_WITHIN_S)
        self.sender.finish()
        write_status(status, self.health.status())
        self.store.close()
        log.info("stopped; %d readings wait in the spool", self.store.waiting)

    def _is_over(self) -> bool:
        return all(reader.state.is_ended for reader in self.readers)



# ---- check -----------------------------------------------------------------------------------------------
# Proves the chain from the settings to an accepted reading, step by step; stops at the first fault, in words.

PATIENCE_S = 15.0
"""How long a source may take for its first reading."""
TOLERANCE_S = 60.0
"""Further off, the door places readings by its own clock."""


class CheckFault(Exception):
    """A step failed: what was seen, and what to do."""


def run_check(path: Path, say: Callable[[str], None]) -> bool:
    """Go through all steps and say what was found; False at the first that fails."""
    steps = _steps(path)
    number = 0
    while True:
        number += 1
        try:
            name, words = next(steps)
        except StopIteration:
            say("All is well: labmon has taken readings from here. Start the client with: run")
            return True
        except (CheckFault, SettingsFault, DoorAway, SourceFault) as fault:
            say(f"FAILED at step {number}: {fault}")
            return False
        say(f"ok {number}. {name}: {words}")


def _steps(path: Path) -> Iterator[tuple[str, str]]:
    settings = read_settings(path)
    yield "settings", f"{len(settings.taps)} taps: {', '.join(tap.tap for tap in settings.taps)}"
    yield "spool", _try_spool(settings)
    found = {}
    for tap in settings.taps:
        found[tap.tap] = _first_reading(tap)
        yield f"source of {tap.tap}", ", ".join(f"{name} = {value}" for name, value in found[tap.tap].values.items())
    yield "clock", _look_at_clock()
    with contextlib.closing(Door(settings.door, settings.ca_file, settings.timeout_s)) as door:
        yield "door", _knock(door)
        key = station_key(settings)
        boot = Boot(f"check-{uuid.uuid4().hex[:8]}", power_up())
        _post(door, boot, [], key)
        yield "key", "it opens the door"
        for tap in settings.taps:
            yield f"reading of {tap.tap}", _offer(door, boot, tap, found[tap.tap], key)


def _try_spool(settings: BenchSettings) -> str:
    spool = open_spool(settings.spool, int(settings.spool_mb * 2**20))
    try:
        return f"{settings.spool} can be written, {spool.waiting} readings wait in it"
    finally:
        spool.close()


def _first_reading(tap: TapSettings) -> Reading:
    """One reading, whatever the source needs for it."""
    if isinstance(tap.source, CsvSettings):  # any old line will do
        tap = replace(tap, source=replace(tap.source, is_from_start=True))
    source = source_of(tap, Store(Path(":memory:"), 1 << 20))
    until_s = time.monotonic() + PATIENCE_S
    odd = ""
    try:
        while time.monotonic() < until_s:
            try:
                readings, place = source.read()
            except OddLine as fault:
                odd = str(fault)
                continue
            if readings:
                return readings[-1]
            if not source.is_awaited and place is None:
                time.sleep(min(tap.read_every_s, 0.5))
            source.kept()
    except SourceEnded as end:
        raise CheckFault(f"tap {tap.tap}: {end} before it gave a reading; start what writes to it") from end
    except SourceFault as fault:
        raise CheckFault(f"tap {tap.tap}: {fault}") from fault
    finally:
        source.close()
    raise CheckFault(f"tap {tap.tap}: no reading within {PATIENCE_S:g} s; {odd or 'is its writer running?'}")


def _look_at_clock() -> str:
    if now_us() < EARLIEST_US:
        raise CheckFault("the PC's clock was never set; set it, and let the system keep it by network time")
    source = clock_source()
    told = "" if source != "not synchronized" else "; nothing keeps it right: turn network time on"
    return time.strftime("%Y-%m-%d %H:%M:%S UTC", time.gmtime()) + f", kept by: {source}{told}"


def _knock(door: Door) -> str:
    answer = door.knock()
    if answer.status != 405 or "station door" not in answer.words:
        raise CheckFault(f"something answers at {door.address}, but it is no labmon station door ({answer.words}); correct door")
    ahead_s = _ahead_s(answer)
    if abs(ahead_s) > TOLERANCE_S:
        raise CheckFault(f"the PC's clock is {abs(ahead_s):.0f} s {'ahead of' if ahead_s > 0 else 'behind'} labmon's; labmon "
                         "would place all readings by its own clock. Set the PC's clock and let the system keep it right")
    return f"labmon answers at {door.address}; the clocks differ by {abs(ahead_s):.0f} s"


def _ahead_s(answer: DoorAnswer) -> float:
    try:
        return time.time() - email.utils.parsedate_to_datetime(answer.date).timestamp()
    except (TypeError, ValueError):
        return 0.0


def _offer(door: Door, boot: Boot, tap: TapSettings, reading: Reading, key: str) -> str:
    """Send the reading; of a file, which is read again later, only its columns."""
    names = tuple(reading.values)
    if isinstance(tap.source, CsvSettings):
        _post(door, boot, [Columns(0, tap.tap, names, [], [], [], [[] for _ in names], [])], key)
        return "labmon takes its columns; lines are sent by run, so that none is sent twice"
    values = [[value] for value in reading.values.values()]
    columns = Columns(0, tap.tap, names, [0], [reading.at_us], [reading.uptime_ms], values, [None])
    said = _post(door, boot, [columns], key).said
    if said["set_aside"]:
        aside = said["set_aside"][0]
        raise CheckFault(f"tap {tap.tap}: labmon set the reading aside: {aside['field']}: {aside['why']}; {aside['do']}")
    if said["accepted"]["ranges"].get(tap.tap) != [[0, 0]]:
        raise CheckFault(f"tap {tap.tap}: labmon did not acknowledge the reading: {str(said)[:200]}")
    return "committed and acknowledged"


def _post(door: Door, boot: Boot, columns: list[Columns], key: str) -> DoorAnswer:
    answer = door.post(*packed(message(boot, columns)), key)
    if answer.status in (401, 403):
        raise CheckFault(f"the key is refused ({answer.words}); put the station's current key into the key file")
    if answer.status in (429, 503):
        raise CheckFault(f"labmon cannot take readings just now ({answer.words}); run keeps them until it can. Check again later")
    if answer.status != 200 or not isinstance(answer.said, dict):
        raise CheckFault(f"labmon refuses this ({answer.words}); correct the settings, or the tap on the station's page")
    return answer



# ---- service ---------------------------------------------------------------------------------------------
# The files that make the operating system start the client and keep it running.

NAME = "labmon-bench"
SYSTEMS = ("systemd", "windows", "launchd")


def service_command(settings: Path) -> list[str]:
    """What the system is to start: this Python with this client, be it a package or one copied file."""
    itself = Path(getattr(sys.modules["__main__"], "__file__", None) or sys.argv[0]).absolute()
    client = [str(itself)] if itself.name != "__main__.py" else ["-m", "labmon_bench"]
    return [sys.executable, *client, "run", str(settings.absolute())]


def service_text(system: str, settings: Path, command: list[str], user: str = "") -> str:
    """The file for one system."""
    makers = {"systemd": systemd_unit, "windows": windows_task, "launchd": launchd_plist}
    return makers[system](settings.absolute(), command, user or getpass.getuser())


def service_remedy(system: str, settings: Path) -> str:
    """What to do with the file, for a person."""
    return {
        "systemd": f"Save it as /etc/systemd/system/{NAME}.service, then: systemctl daemon-reload; systemctl enable --now {NAME}",
        "windows": f"Save it with --write {NAME}.xml, then as administrator: schtasks /Create /TN {NAME} /XML {NAME}.xml "
                   f"/RU SYSTEM, and: schtasks /Run /TN {NAME}",
        "launchd": "Save it as /Library/LaunchDaemons/org.labmon.bench.plist, then: sudo launchctl bootstrap system "
                   "/Library/LaunchDaemons/org.labmon.bench.plist",
    }[system]


def systemd_unit(settings: Path, command: list[str], user: str) -> str:
    """A unit that starts again after a crash, for ever, and may write only where the settings lie."""
    words = " ".join(_systemd_word(word) for word in command)
    return f"""[Unit]
Description=Sends the readings of an optical bench to labmon
After=network-online.target time-sync.target
Wants=network-online.target
StartLimitIntervalSec=0

[Service]
ExecStart={words}
WorkingDirectory={_systemd_path(settings.parent)}
User={user}
Restart=always
RestartSec=5
KillSignal=SIGTERM
TimeoutStopSec=20
NoNewPrivileges=yes
ProtectSystem=full
PrivateTmp=yes

[Install]
WantedBy=multi-user.target
"""


def windows_task(settings: Path, command: list[str], user: str) -> str:
    """A task that starts with the machine, without a time limit, and again a minute after a crash; ``schtasks`` reads it."""
    arguments = subprocess.list2cmdline(command[1:])
    return f"""<?xml version="1.0" encoding="UTF-16"?>
<Task version="1.2" xmlns="http://schemas.microsoft.com/windows/2004/02/mit/task">
  <RegistrationInfo>
    <Description>Sends the readings of an optical bench to labmon</Description>
  </RegistrationInfo>
  <Triggers>
    <BootTrigger>
      <Enabled>true</Enabled>
      <Delay>PT15S</Delay>
    </BootTrigger>
  </Triggers>
  <Principals>
    <Principal id="Author">
      <UserId>S-1-5-18</UserId>
      <RunLevel>LeastPrivilege</RunLevel>
    </Principal>
  </Principals>
  <Settings>
    <MultipleInstancesPolicy>IgnoreNew</MultipleInstancesPolicy>
    <DisallowStartIfOnBatteries>false</DisallowStartIfOnBatteries>
    <StopIfGoingOnBatteries>false</StopIfGoingOnBatteries>
    <StartWhenAvailable>true</StartWhenAvailable>
    <IdleSettings>
      <StopOnIdleEnd>false</StopOnIdleEnd>
      <RestartOnIdle>false</RestartOnIdle>
    </IdleSettings>
    <ExecutionTimeLimit>PT0S</ExecutionTimeLimit>
    <Priority>5</Priority>
    <RestartOnFailure>
      <Interval>PT1M</Interval>
      <Count>999</Count>
    </RestartOnFailure>
  </Settings>
  <Actions Context="Author">
    <Exec>
      <Command>{escape(command[0])}</Command>
      <Arguments>{escape(arguments)}</Arguments>
      <WorkingDirectory>{escape(str(settings.parent))}</WorkingDirectory>
    </Exec>
  </Actions>
</Task>
"""


def launchd_plist(settings: Path, command: list[str], user: str) -> str:
    """A property list for macOS that keeps the client alive."""
    return plistlib.dumps({"Label": "org.labmon.bench", "ProgramArguments": command, "WorkingDirectory": str(settings.parent),
                           "UserName": user, "RunAtLoad": True, "KeepAlive": True, "ThrottleInterval": 5}).decode()


def _systemd_word(word: str) -> str:
    escaped = word.replace("\\", "\\\\").replace('"', '\\"').replace("%", "%%").replace("$", "$$")
    return f'"{escaped}"' if any(sign in word for sign in " \"'\\") or not word else escaped


def _systemd_path(path: Path) -> str:
    return str(path).replace("%", "%%")



# ---- __main__ --------------------------------------------------------------------------------------------
# The command ``labmon-bench``: run, check, status, service, example.

EXAMPLE = """\
[bench]
door = http://192.0.2.10:8000
key_file = station.key

[tap eom-in]
source = instrument
address = TCPIP0::192.0.2.20::5025::SOCKET
ask =
    port1 port2: READ?
read_every_s = 1
"""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; its exit status."""
    wish = _parser().parse_args(arguments)
    try:
        return int(wish.command(wish))
    except SettingsFault as fault:
        print(fault, file=sys.stderr)
        return 2
    except KeyboardInterrupt:
        return 130


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="labmon-bench",
                                     description="Reads the detectors of one bench and sends them to labmon.")
    parser.add_argument("--version", action="version", version=FIRMWARE)
    commands = parser.add_subparsers(required=True, metavar="COMMAND")
    for name, command, words in (("run", _run, "read and send, for ever"),
                                 ("check", _check, "prove the chain from the settings to an accepted reading"),
                                 ("status", _status, "how the running client does")):
        made = commands.add_parser(name, help=words, description=words)
        made.add_argument("settings", type=Path, help="the settings file")
        made.set_defaults(command=command)
    service = commands.add_parser("service", help="print the file that makes the system start the client")
    service.add_argument("system", choices=SYSTEMS)
    service.add_argument("settings", type=Path)
    service.add_argument("--write", type=Path, help="write it to a file instead")
    service.add_argument("--user", default="", help="who runs it (systemd and launchd)")
    service.set_defaults(command=_service)
    commands.add_parser("example", help="print a settings file to begin with").set_defaults(command=_example)
    return parser


def _run(wish: argparse.Namespace) -> int:
    settings = read_settings(wish.settings)
    _begin_log(settings)
    stop = threading.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: stop.set())
    Bench(settings).run(stop)
    return 0


def _check(wish: argparse.Namespace) -> int:
    logging.disable()
    return 0 if run_check(wish.settings, print) else 1


def _status(wish: argparse.Namespace) -> int:
    path = status_path(read_settings(wish.settings).spool)
    try:
        print(status_words(json.loads(path.read_text(encoding="utf-8"))))
    except (OSError, ValueError):
        print(f"No client has run with these settings: {path} is not there.", file=sys.stderr)
        return 1
    return 0


def _service(wish: argparse.Namespace) -> int:
    read_settings(wish.settings)
    text = service_text(wish.system, wish.settings, service_command(wish.settings), wish.user)
    if wish.write is None:
        sys.stdout.write(text)
    else:
        wish.write.write_text(text, encoding="utf-16" if wish.system == "windows" else "utf-8")
    print(service_remedy(wish.system, wish.settings), file=sys.stderr)
    return 0


def _example(wish: argparse.Namespace) -> int:
    sys.stdout.write(EXAMPLE)
    return 0


def _begin_log(settings: BenchSettings) -> None:
    """To the error output, and to a file of bounded size where one is named."""
    handlers: list[logging.Handler] = [logging.StreamHandler()]
    if settings.log_file is not None:
        handlers.append(logging.handlers.RotatingFileHandler(
            settings.log_file, maxBytes=1_000_000, backupCount=3, encoding="utf-8"))
    for handler in handlers:
        handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
        logging.getLogger("labmon_bench").addHandler(handler)
    logging.getLogger("labmon_bench").setLevel(logging.INFO)


if __name__ == "__main__":
    sys.exit(main())
