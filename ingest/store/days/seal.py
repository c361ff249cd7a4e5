"""Moves a past day's blocks into its file, and late blocks into a new version of it.

In order: the file's name is marked as needed by nobody, the file is written whole and synchronised, read back and compared, and
then one transaction names it in a row and deletes the blocks. Whatever is killed between two steps, readings count in the
blocks or in the file, never in both, and a file without a row is swept away later. Nothing is locked while the file is being
written: if blocks changed meanwhile, the transaction finds out and the day is sealed another time.
"""

import hashlib
import logging
import secrets
import tempfile
import time
from collections.abc import Iterator
from dataclasses import dataclass
from typing import IO

from django.core.files.base import File
from django.db import transaction

from ingest.database import fetch, shared
from ingest.store.arrays import DamagedBody
from ingest.store.blocks import lock_tap
from ingest.store.codec import block_columns, unpack_block
from ingest.store.columns import Readings, concatenate
from ingest.store.days.layout import DayAbout, schema_of
from ingest.store.days.left import mark_left, take_mark
from ingest.store.days.open import DayEntry, OpenDay, read_day
from ingest.store.days.storage import days_storage
from ingest.store.days.write import PIECE_READINGS, DayWriter, Written, add_content
from ingest.times import SECOND_US, at_of, now_us

log = logging.getLogger(__name__)

DAY_US = 86_400 * SECOND_US
SEAL_AFTER_S = 6 * 3600
"""A day is sealed this long after its end: most late readings have come by then."""
RESEAL_AFTER_S = 6 * 3600
"""Late blocks wait this long after the last sealing of their day, so that a trickle rewrites a file a few times a day only."""
_WINDOWS = 24
_WHOLE_UP_TO = 100_000
_HEAD_BYTES = 16_384


@dataclass(frozen=True, slots=True)
class _Block:
    id: int
    sha256: bytes
    first_us: int
    last_us: int
    count: int
    columns: dict[str, str]


@dataclass(frozen=True, slots=True)
class _Plan:
    """What a day's new file is made of.

    Attributes:
        old: The version so far (row id and entry), None where there is none.
    """

    tap_id: int
    day_us: int
    blocks: list[_Block]
    old: tuple[int, DayEntry, int] | None

    @property
    def count(self) -> int:
        return sum(block.count for block in self.blocks) + (self.old[2] if self.old else 0)


class NotSealed(RuntimeError):
    """The day stays in its blocks for now; the message says why."""


def day_of(at_us: int) -> int:
    """Start of the UTC day, us."""
    return at_us // DAY_US * DAY_US


def seal_days(clock_us: int | None = None, *, for_s: float = float("inf"), limit: int = 5_000) -> int:
    """Seal the days that are due, oldest first, for so many seconds; give how many were sealed."""
    began, sealed = time.monotonic(), 0
    for tap_id, day_us in days_due(now_us() if clock_us is None else clock_us, limit):
        if time.monotonic() - began > for_s:
            break
        sealed += _seal_or_log(tap_id, day_us)
    return sealed


def days_due(clock_us: int, limit: int) -> list[tuple[int, int]]:
    """(tap, day) with blocks of a day that is over, not sealed a short while ago; oldest days first."""
    return fetch(shared(), """
        SELECT tap_id, day_us FROM (
            SELECT DISTINCT tap_id, slot_us - ((slot_us %% 86400000000) + 86400000000) %% 86400000000 AS day_us
            FROM ingest_block WHERE slot_us < %s) AS waiting
        LEFT JOIN ingest_dayfile USING (tap_id, day_us)
        WHERE sealed_us IS NULL OR sealed_us <= %s ORDER BY day_us, tap_id LIMIT %s""",
        day_of(clock_us - SEAL_AFTER_S * SECOND_US), clock_us - RESEAL_AFTER_S * SECOND_US, limit)


def _seal_or_log(tap_id: int, day_us: int) -> bool:
    """One day that cannot be sealed must not stop the others."""
    try:
        return seal_day(tap_id, day_us)
    except (NotSealed, DamagedBody, OSError, LookupError) as error:
        log.exception("day_not_sealed", extra={"tap_id": tap_id, "day": _day_text(day_us), "why": str(error)})
        return False


def seal_day(tap_id: int, day_us: int) -> bool:
    """Write a tap's day into a new version of its file; False where it has no blocks.

    Raises:
        NotSealed: Blocks changed meanwhile, or what was read back is not what was written.
        DamagedBody: A block or the version so far cannot be read.
    """
    plan = _plan_of(tap_id, day_us)
    if not plan.blocks:
        return False
    about = _about(plan)
    with tempfile.TemporaryFile() as draft:
        written = _write(draft, plan, about)
        entry = DayEntry(_new_name(about), written.size, written.footer_size, written.checks)
        mark_left(shared(), entry.name)
        _save(entry.name, draft)
    _read_back(entry, written)
    _commit(plan, entry, written)
    log.info("day_sealed", extra={"tap_id": tap_id, "day": about.day, "readings": written.count, "bytes": written.size,
                                  "is_again": plan.old is not None})
    return True


def _plan_of(tap_id: int, day_us: int) -> _Plan:
    db = shared()
    blocks = [_Block(*row[:5], block_columns(row[5])) for row in fetch(
        db, "SELECT id, sha256, first_at_us, last_at_us, count, substring(body from 1 for %s) FROM ingest_block "
            "WHERE tap_id = %s AND slot_us >= %s AND slot_us < %s ORDER BY slot_us",
        _HEAD_BYTES, tap_id, day_us, day_us + DAY_US)]
    old = fetch(db, "SELECT id, name, size, footer_size, checks, count FROM ingest_dayfile WHERE tap_id = %s AND day_us = %s",
                tap_id, day_us)
    return _Plan(tap_id, day_us, blocks, (old[0][0], DayEntry(*old[0][1:5]), old[0][5]) if old else None)


def _about(plan: _Plan) -> DayAbout:
    """What the file will say of itself; a column is float32 where it is so in every part."""
    db = shared()
    parts = [block.columns for block in plan.blocks]
    if plan.old:
        with OpenDay(plan.old[1]) as day:
            parts.insert(0, day.columns())
    names = dict.fromkeys(name for part in parts for name in part)
    columns = {name: "f4" if all(part.get(name, "f4") == "f4" for part in parts) else "f8" for name in names if name}
    station, tap, kind, unit = fetch(db, "SELECT station.name, tap.name, tap.kind, tap.unit FROM ingest_tap AS tap "
                                         "JOIN ingest_station AS station ON station.id = station_id WHERE tap.id = %s",
                                     plan.tap_id)[0]
    boots = dict(fetch(db, "SELECT tap_boot.id, boot FROM ingest_tapboot AS tap_boot "
                           "JOIN ingest_stationboot AS station_boot ON station_boot.id = station_boot_id WHERE tap_id = %s",
                       plan.tap_id))
    return DayAbout(station, tap, kind, unit, _day_text(plan.day_us), columns, "" in names, boots)


def _new_name(about: DayAbout) -> str:
    """A name of its own for each version: a file is never written twice."""
    return f"{about.station}/{about.tap}/{about.day[:4]}/{about.day}-{secrets.token_hex(4)}.parquet"


def _day_text(day_us: int) -> str:
    return at_of(day_us).strftime("%Y-%m-%d")


def _write(draft: IO[bytes], plan: _Plan, about: DayAbout) -> Written:
    """The day in order of time, piece by piece, so that memory is bounded however fast the tap is."""
    writer = DayWriter(draft, schema_of(about), about.boots)
    waiting: list[Readings] = []
    for part in _pieces(plan):
        waiting.append(part)
        if sum(map(len, waiting)) >= PIECE_READINGS:
            writer.add(concatenate(waiting))
            waiting = []
    if any(map(len, waiting)):
        writer.add(concatenate(waiting))
    written = writer.finish()
    if written.count != plan.count:
        raise NotSealed(f"{written.count} of {plan.count} readings were found; another worker may be at it")
    return written


def _pieces(plan: _Plan) -> Iterator[Readings]:
    """Readings of consecutive windows of the day, sorted; a small day is one window."""
    windows = 1 if plan.count <= _WHOLE_UP_TO else _WINDOWS
    for number in range(windows):
        from_us = plan.day_us + number * DAY_US // windows
        until_us = plan.day_us + (number + 1) * DAY_US // windows
        inside = [block.id for block in plan.blocks if block.first_us < until_us and block.last_us >= from_us]
        bodies = fetch(shared(), "SELECT body FROM ingest_block WHERE id = ANY(%s::bigint[]) ORDER BY slot_us", inside)
        parts = [unpack_block(body, as_sent=True).between(from_us, until_us) for (body,) in bodies]
        if plan.old:
            parts.append(read_day(plan.old[1], from_us, until_us, as_sent=True))
        yield concatenate(parts).sorted()


def _save(name: str, draft: IO[bytes]) -> None:
    draft.seek(0)
    saved = days_storage().save(name, File(draft))
    if saved != name:
        days_storage().delete(saved)
        raise NotSealed(f"the storage took {name} as {saved}; use one that keeps names")


def _read_back(entry: DayEntry, written: Written) -> None:
    """The file as the storage gives it: the same bytes, and the same readings to the last bit."""
    digest = hashlib.sha256()
    with days_storage().open(entry.name, "rb") as file:
        while part := file.read(1 << 20):
            digest.update(part)
    content = hashlib.sha256()
    with OpenDay(entry) as day:
        for group in range(day.metadata.num_row_groups):
            add_content(content, day.read([group], as_sent=True))
    if digest.digest() != written.sha256 or content.digest() != written.content:
        raise NotSealed(f"{entry.name} reads back other than it was written: check the disk")


def _commit(plan: _Plan, entry: DayEntry, written: Written) -> None:
    """One transaction: the file is named, the blocks are gone."""
    with transaction.atomic():
        db = shared()
        lock_tap(db, plan.tap_id)
        _check_unchanged(plan)
        take_mark(db, entry.name)
        _name_file(plan, entry, written)
        _delete_blocks(plan)


def _check_unchanged(plan: _Plan) -> None:
    db = shared()
    blocks = fetch(db, "SELECT id, sha256 FROM ingest_block WHERE tap_id = %s AND slot_us >= %s AND slot_us < %s "
                       "ORDER BY slot_us", plan.tap_id, plan.day_us, plan.day_us + DAY_US)
    old = fetch(db, "SELECT id FROM ingest_dayfile WHERE tap_id = %s AND day_us = %s", plan.tap_id, plan.day_us)
    if blocks != [(block.id, block.sha256) for block in plan.blocks] or old != ([(plan.old[0],)] if plan.old else []):
        raise NotSealed("readings came for the day while it was being sealed; it is done another time")


def _name_file(plan: _Plan, entry: DayEntry, written: Written) -> None:
    db = shared()
    if plan.old:
        fetch(db, "DELETE FROM ingest_dayfileboot WHERE day_file_id = %s RETURNING 1", plan.old[0])
        fetch(db, "DELETE FROM ingest_dayfile WHERE id = %s RETURNING 1", plan.old[0])
    clock_us = now_us()
    ((row_id,),) = fetch(
        db, "INSERT INTO ingest_dayfile (tap_id, day_us, name, first_at_us, last_at_us, count, size, footer_size, checks, "
            "sha256, sealed_us, verified_us, fault) VALUES (%s, %s, %s, %s, %s, %s, %s, %s, %s, %s, %s, %s, '') RETURNING id",
        plan.tap_id, plan.day_us, entry.name, written.first_at_us, written.last_at_us, written.count, written.size,
        written.footer_size, written.checks, written.sha256, clock_us, clock_us)
    if written.boots:
        fetch(db, "INSERT INTO ingest_dayfileboot (day_file_id, tap_boot_id, sequences) "
                  "SELECT %s, boot, int8range(low, high, '[]') "
                  "FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[]) AS row(boot, low, high) RETURNING 1",
              row_id, *(list(column) for column in zip(*written.boots, strict=True)))


def _delete_blocks(plan: _Plan) -> None:
    db, ids = shared(), [block.id for block in plan.blocks]
    fetch(db, "DELETE FROM ingest_blockboot WHERE block_id = ANY(%s::bigint[]) RETURNING 1", ids)
    fetch(db, "DELETE FROM ingest_block WHERE id = ANY(%s::bigint[]) RETURNING 1", ids)
