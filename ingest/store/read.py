"""The one reader of raw readings: day files, blocks and inbox together, sorted, each reading once.

All parts are fetched by one statement, so by one snapshot: while sealing moves rows from the inbox into blocks, a reader
sees them before or after, never twice and never not at all. That each identity is stored once is the writers' promise
(``ingest.door.commit``), not repaired here.
"""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any, LiteralString

import numpy as np
import psycopg

from ingest.database import fetch, shared
from ingest.store.arrays import DamagedBody
from ingest.store.codec import Batch, unpack_batch, unpack_block
from ingest.store.columns import FloatArray, ObjectArray, Readings, concatenate, no_readings
from ingest.times import rfc3339_of

LONGEST_SLOT_US = 86_400_000_000
_TIME_LIMIT_US = 1 << 62

# Day files, once they exist, are a third part here: their index rows join the same statement, their readings come first.
_PARTS: LiteralString = """
    WITH asked AS (SELECT * FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[]) WITH ORDINALITY
                   AS span(tap, from_us, until_us, place))
    SELECT place::int, first_at_us, NULL::bigint AS boot, NULL::bigint AS arrival_us, NULL::bigint AS crc, body
    FROM asked JOIN ingest_block ON tap_id = tap AND first_at_us < until_us
         AND last_at_us >= from_us AND last_at_us < until_us + 86400000000
    UNION ALL
    SELECT place::int, first_at_us, tap_boot_id, arrival_us, crc, body
    FROM asked JOIN ingest_inboxrow ON tap_id = tap AND first_at_us < until_us AND last_at_us >= from_us
"""
_NEWEST: LiteralString = """
    SELECT place::int, first_at_us, NULL::bigint AS boot, NULL::bigint AS arrival_us, NULL::bigint AS crc, body
    FROM unnest(%s::bigint[]) WITH ORDINALITY AS asked(tap, place), LATERAL (
        SELECT first_at_us, body, sum(count) OVER (ORDER BY last_at_us DESC) - count AS newer
        FROM (SELECT * FROM ingest_block WHERE tap_id = tap ORDER BY last_at_us DESC LIMIT %s) AS last_blocks) AS blocks
    WHERE newer < %s
    UNION ALL
    SELECT place::int, first_at_us, tap_boot_id, arrival_us, crc, body
    FROM unnest(%s::bigint[]) WITH ORDINALITY AS asked(tap, place), LATERAL (
        SELECT * FROM ingest_inboxrow WHERE tap_id = tap ORDER BY last_at_us DESC LIMIT %s) AS rows
"""


class DamagedStore(RuntimeError):
    """Stored readings cannot be read back as written; the message names the tap, the time and what to do."""


def read_readings(tap_id: int, from_us: int, until_us: int, *, columns: Sequence[str] | None = None) -> Readings:
    """A tap's readings of the half-open span; ``columns`` limits which are decoded (None: all)."""
    return read_spans(shared(), [(tap_id, from_us, until_us)], columns)[0]


def read_many(spans: Mapping[int, tuple[int, int]], *, columns: Sequence[str] | None = None) -> dict[int, Readings]:
    """Readings by tap id, each in its own half-open span; one query however many taps."""
    asked = [(tap, from_us, until_us) for tap, (from_us, until_us) in spans.items()]
    return dict(zip(spans, read_spans(shared(), asked, columns), strict=True))


def newest_readings(tap_ids: Iterable[int], *, count: int = 1) -> dict[int, Readings]:
    """The ``count`` newest readings by data time of each tap (fewer where there are fewer); one query."""
    taps = list(tap_ids)
    rows = fetch(shared(), _NEWEST, taps, count, count, taps, count)
    found = _assemble(rows, taps, None)
    return {tap: readings.pick(slice(-count, None)) for tap, readings in zip(taps, found, strict=True)}


def read_spans(db: psycopg.Connection[Any], spans: Sequence[tuple[int, int, int]],
               columns: Sequence[str] | None = None) -> list[Readings]:
    """Readings of spans (tap id, from, until), in the order asked; a tap may be asked several times."""
    taps = [tap for tap, _, _ in spans]
    starts = [max(from_us, -_TIME_LIMIT_US) for _, from_us, _ in spans]
    ends = [min(until_us, _TIME_LIMIT_US) for _, _, until_us in spans]
    found = _assemble(fetch(db, _PARTS, taps, starts, ends), taps, columns)
    return [readings.between(from_us, until_us) for readings, from_us, until_us in zip(found, starts, ends, strict=True)]


def _assemble(rows: list[tuple[Any, ...]], taps: Sequence[int], columns: Sequence[str] | None) -> list[Readings]:
    """Readings per asked place from the rows (place, first_at_us, boot, arrival_us, crc, body)."""
    blocks: dict[int, list[tuple[Any, ...]]] = {}
    inbox: dict[int, list[tuple[Any, ...]]] = {}
    for row in rows:
        (inbox if row[2] is not None else blocks).setdefault(row[0] - 1, []).append(row)
    wanted = None if columns is None else frozenset(columns)
    made = []
    for place, tap in enumerate(taps):
        parts = [_opened_block(tap, row, wanted) for row in sorted(blocks.get(place, ()), key=lambda row: row[1])]
        if place in inbox:
            parts.append(readings_of_rows(tap, sorted(inbox[place], key=lambda row: row[1]), wanted))
        made.append(concatenate(parts).sorted() if parts else no_readings(columns))
    return made


def _opened_block(tap: int, row: tuple[Any, ...], wanted: frozenset[str] | None) -> Readings:
    try:
        return unpack_block(row[5], wanted)
    except DamagedBody as error:
        raise _damage(tap, row, "block", error) from error


def readings_of_rows(tap: int, rows: list[tuple[Any, ...]], wanted: frozenset[str] | None = None) -> Readings:
    """Readings of inbox rows (…, first_at_us, boot, arrival_us, crc, body, …), in the rows' order."""
    batches = []
    for row in rows:
        try:
            batches.append(unpack_batch(row[5], row[4]))
        except DamagedBody as error:
            raise _damage(tap, row, "batch", error) from error
    counts = [len(batch.at_us) for batch in batches]
    return Readings(
        at_us=np.concatenate([batch.at_us for batch in batches]),
        columns=_joined_columns(batches, wanted),
        boot_id=np.repeat(np.array([row[2] for row in rows], np.int64), counts),
        sequence=np.concatenate([batch.sequence for batch in batches]),
        own_at_us=np.concatenate([batch.own_at_us for batch in batches]),
        arrival_us=np.repeat(np.array([row[3] for row in rows], np.int64), counts),
        sent_us=np.repeat(np.array([batch.sent_us for batch in batches], np.int64), counts),
        is_server_timed=np.repeat(np.array([batch.is_server_timed for batch in batches], np.bool_), counts),
        unknown=_joined_unknown(batches))


def _joined_columns(batches: list[Batch], wanted: frozenset[str] | None) -> dict[str, FloatArray]:
    """Columns of all batches; NaN where a batch lacks one."""
    names = batches[0].names
    if all(batch.names == names for batch in batches):
        values = np.concatenate([batch.values for batch in batches], axis=1)
        return {name: values[number] for number, name in enumerate(names) if wanted is None or name in wanted}
    every = dict.fromkeys(name for batch in batches for name in batch.names if wanted is None or name in wanted)
    columns = {name: np.full(sum(len(batch.at_us) for batch in batches), np.nan) for name in every}
    place = 0
    for batch in batches:
        for number, name in enumerate(batch.names):
            if name in columns:
                columns[name][place:place + len(batch.at_us)] = batch.values[number]
        place += len(batch.at_us)
    return columns


def _joined_unknown(batches: list[Batch]) -> ObjectArray | None:
    if all(batch.unknown is None for batch in batches):
        return None
    return np.concatenate([np.full(len(batch.at_us), "", object) if batch.unknown is None else batch.unknown
                           for batch in batches])


def _damage(tap: int, row: tuple[Any, ...], what: str, error: DamagedBody) -> DamagedStore:
    return DamagedStore(f"tap {tap}, {what} from {rfc3339_of(row[1])}: {error}. The disk or a copy is damaged: "
                        "restore this row from a backup; the rest of the tap is not affected.")
