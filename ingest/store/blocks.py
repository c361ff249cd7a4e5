"""Writes readings into a tap's blocks: the only writer of Block and BlockBoot rows."""

import hashlib
from collections.abc import Iterator
from typing import Any

import numpy as np
import psycopg

from ingest.database import fetch
from ingest.store.arrays import DamagedBody
from ingest.store.codec import pack_block, unpack_block
from ingest.store.columns import Readings, concatenate, narrowed
from ingest.store.days.write import sequence_spans
from ingest.store.read import LONGEST_SLOT_US, DamagedStore
from ingest.store.slots import slot_length_s, slots_of
from ingest.times import rfc3339_of

_LOCK_CLASS = 0x1AB0
_CHUNK_BYTES = 8 << 20


def lock_tap(db: psycopg.Connection[Any], tap_id: int) -> None:
    """Until the transaction ends, nobody else writes this tap's blocks."""
    psycopg.Cursor(db).execute("SELECT pg_advisory_xact_lock(%s, %s)", (_LOCK_CLASS, tap_id))


def merge_into_blocks(db: psycopg.Connection[Any], tap_id: int, readings: Readings) -> int:
    """Add readings to the tap's blocks and give the slot length used, s; the caller holds ``lock_tap``.

    The readings must not be in a block yet; that each identity comes once is the committer's part.
    """
    readings = readings.sorted()
    if not len(readings):
        return 600
    is_float32 = fetch(db, "SELECT is_float32 FROM ingest_tap WHERE id = %s", tap_id) == [(True,)]
    if is_float32:
        readings = narrowed(readings)
    first_us, last_us = int(readings.at_us[0]), int(readings.at_us[-1])
    taken = dict(fetch(
        db, "SELECT slot_us, span_us FROM ingest_block WHERE tap_id = %s AND slot_us > %s AND slot_us <= %s "
            "ORDER BY slot_us", tap_id, first_us - LONGEST_SLOT_US, last_us + LONGEST_SLOT_US))
    length_s = slot_length_s(readings.at_us)
    starts, spans = slots_of(readings.at_us, length_s, sorted(taken.items()))
    new: list[tuple[int, int, Readings]] = []
    for slot_us, span_us, part in _by_slot(readings, starts, spans):
        if slot_us in taken:
            _add_to_block(db, tap_id, slot_us, part, is_float32)
        else:
            new.append((slot_us, span_us, part))
    _insert_blocks(db, tap_id, new)
    return length_s


def _by_slot(readings: Readings, starts: Any, spans: Any) -> Iterator[tuple[int, int, Readings]]:
    """(slot start, slot length, its readings), in order of time; ``readings`` is sorted, so slots follow each other."""
    edges = np.concatenate([[0], np.flatnonzero(starts[1:] != starts[:-1]) + 1, [len(starts)]])
    for first, end in zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True):
        yield int(starts[first]), int(spans[first]), readings.pick(slice(first, end))


def _add_to_block(db: psycopg.Connection[Any], tap_id: int, slot_us: int, part: Readings, is_float32: bool) -> None:
    """Merge late readings into the block that lies there."""
    block_id, body = fetch(db, "SELECT id, body FROM ingest_block WHERE tap_id = %s AND slot_us = %s",
                           tap_id, slot_us)[0]
    try:
        merged = concatenate([unpack_block(body, as_sent=True), part]).sorted()
    except DamagedBody as error:
        raise DamagedStore(f"tap {tap_id}, block from {rfc3339_of(slot_us)}: {error}. New readings wait in the inbox; "
                           "restore this block from a backup.") from error
    if is_float32:
        merged = narrowed(merged)
    body = pack_block(merged)
    cursor = psycopg.Cursor(db)
    cursor.execute("UPDATE ingest_block SET first_at_us = %s, last_at_us = %s, count = %s, sha256 = %s, body = %s "
                   "WHERE id = %s", (int(merged.at_us[0]), int(merged.at_us[-1]), len(merged),
                                     hashlib.sha256(body).digest(), body, block_id))
    cursor.execute("DELETE FROM ingest_blockboot WHERE block_id = %s", (block_id,))
    _insert_boots(db, [(block_id, merged)])


def _insert_blocks(db: psycopg.Connection[Any], tap_id: int, parts: list[tuple[int, int, Readings]]) -> None:
    """New blocks, some megabytes at a time."""
    waiting: list[tuple[int, int, Readings, bytes]] = []
    size = 0
    for number, (slot_us, span_us, part) in enumerate(parts):
        body = pack_block(part)
        waiting.append((slot_us, span_us, part, body))
        size += len(body)
        if size > _CHUNK_BYTES or number == len(parts) - 1:
            _insert_chunk(db, tap_id, waiting)
            waiting, size = [], 0


def _insert_chunk(db: psycopg.Connection[Any], tap_id: int, chunk: list[tuple[int, int, Readings, bytes]]) -> None:
    made = dict(fetch(
        db, "INSERT INTO ingest_block (tap_id, slot_us, span_us, first_at_us, last_at_us, count, sha256, body) "
            "SELECT %s, * FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[], %s::bigint[], %s::int[], %s::bytea[], "
            "%s::bytea[]) RETURNING slot_us, id",
        tap_id, [slot for slot, _, _, _ in chunk], [span for _, span, _, _ in chunk],
        [int(part.at_us[0]) for _, _, part, _ in chunk], [int(part.at_us[-1]) for _, _, part, _ in chunk],
        [len(part) for _, _, part, _ in chunk], [hashlib.sha256(body).digest() for _, _, _, body in chunk],
        [body for _, _, _, body in chunk]))
    _insert_boots(db, [(made[slot], part) for slot, _, part, _ in chunk])


def _insert_boots(db: psycopg.Connection[Any], blocks: list[tuple[int, Readings]]) -> None:
    """Which sequences of which boot lie in each block; readings without sequence are found by time."""
    rows = [(block_id, boot, low, high + 1) for block_id, part in blocks for boot, low, high in sequence_spans(part)]
    if rows:
        psycopg.Cursor(db).execute(
            "INSERT INTO ingest_blockboot (block_id, tap_boot_id, sequences) SELECT block, boot, int8range(low, high) "
            "FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[], %s::bigint[]) AS row(block, boot, low, high)",
            [list(column) for column in zip(*rows, strict=True)])
