"""Looks whether stored readings are still what was written: blocks, inbox rows and day files, whole files by their SHA-256."""

import hashlib
import logging
import time
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import psycopg
from django.core.files.storage import Storage
from psycopg import sql

from ingest.database import fetch, shared
from ingest.store.arrays import DamagedBody
from ingest.store.codec import unpack_batch, unpack_block
from ingest.store.days.faults import set_faults
from ingest.store.days.open import DayEntry, OpenDay
from ingest.store.days.storage import days_storage
from ingest.times import SECOND_US, now_us, rfc3339_of

log = logging.getLogger(__name__)

CHECK_AFTER_S = 7 * 86_400
"""A file that was read whole longer ago is read again."""
_STEP = 500


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing that is not what was written."""

    what: str
    why: str


def check_days(*, for_s: float = float("inf"), older_s: float = CHECK_AFTER_S, limit: int = 1_000_000) -> list[Fault]:
    """Read files whole, the longest unread first, for so many seconds; write down what is found (or found well again)."""
    began, faults = time.monotonic(), []
    before_us = now_us() - int(older_s * SECOND_US)
    names = fetch(shared(), "SELECT name FROM ingest_dayfile WHERE verified_us <= %s OR fault <> '' "
                            "ORDER BY verified_us LIMIT %s", before_us, limit)
    for (name,) in names:
        if time.monotonic() - began > for_s:
            break
        fault = check_file(name)
        if fault is not None:
            faults.append(fault)
    return faults


def check_file(name: str) -> Fault | None:
    """Read one file whole; its row is brought in line with what was found. None where all is well, or the row is gone."""
    db = shared()
    rows = fetch(db, "SELECT size, footer_size, checks, sha256, count FROM ingest_dayfile WHERE name = %s", name)
    if not rows:
        return None
    why = _why_faulty(name, rows[0])
    if not why:
        fetch(db, "UPDATE ingest_dayfile SET verified_us = %s WHERE name = %s RETURNING 1", now_us(), name)
    elif not fetch(db, "SELECT 1 FROM ingest_dayfile WHERE name = %s", name):
        return None  # replaced by a newer version while it was read
    else:
        log.error("day_file_faulty", extra={"file": name, "why": why})
    set_faults(db, [(name, why)])
    return Fault(f"day file {name}", why) if why else None


def _why_faulty(name: str, row: tuple[Any, ...]) -> str:
    size, footer_size, checks, sha256, count = row
    try:
        digest = _digest_of(days_storage(), name)
    except OSError as error:
        return f"it cannot be read ({error.strerror or error})"
    if digest != sha256:
        return "it is not what was written: its SHA-256 is another"
    try:
        with OpenDay(DayEntry(name, size, footer_size, checks)) as day:
            found = sum(len(day.read([group])) for group in range(day.metadata.num_row_groups))
    except DamagedBody as error:
        return str(error)
    return "" if found == count else f"it holds {found} readings, its row says {count}"


def _digest_of(storage: Storage, name: str) -> bytes:
    digest = hashlib.sha256()
    with storage.open(name, "rb") as file:
        while part := file.read(1 << 20):
            digest.update(part)
    return digest.digest()


def faulty_rows() -> Iterator[Fault]:
    """Blocks and inbox rows that cannot be read back, in steps of bounded memory."""
    for table, columns in (("ingest_block", "sha256"), ("ingest_inboxrow", "crc")):
        behind = 0
        while rows := _step(table, columns, behind):
            for row_id, tap_id, first_us, check, body in rows:
                why = _why_damaged(body, check, is_block=table == "ingest_block")
                if why:
                    yield Fault(f"{table} {row_id} of tap {tap_id} from {rfc3339_of(first_us)}", why)
            behind = rows[-1][0]


def _step(table: str, check: str, behind: int) -> list[tuple[Any, ...]]:
    query = sql.SQL("SELECT id, tap_id, first_at_us, {}, body FROM {} WHERE id > %s ORDER BY id LIMIT %s").format(
        sql.Identifier(check), sql.Identifier(table))
    return psycopg.Cursor(shared()).execute(query, (behind, _STEP), binary=True).fetchall()


def _why_damaged(body: bytes, check: Any, *, is_block: bool) -> str:
    try:
        if not is_block:
            unpack_batch(body, check)
        elif hashlib.sha256(body).digest() != check:
            return "its SHA-256 is another than when it was written"
        else:
            unpack_block(body)
    except DamagedBody as error:
        return str(error)
    return ""


def files_of(storage: Storage, folder: str = "") -> Iterator[str]:
    """Names of all files in the storage."""
    try:
        folders, files = storage.listdir(folder)
    except FileNotFoundError:
        return
    for name in sorted(files):
        yield f"{folder}/{name}" if folder else name
    for name in sorted(folders):
        yield from files_of(storage, f"{folder}/{name}" if folder else name)


def strange_files() -> list[str]:
    """Files in the storage that neither a row nor a mark names: of another lab, or of a later state than the database's."""
    known = {name for (name,) in fetch(shared(), "SELECT name FROM ingest_dayfile UNION SELECT name FROM ingest_leftfile")}
    return [name for name in files_of(days_storage()) if name not in known and not name.endswith(".part")]
