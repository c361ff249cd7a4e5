"""Finds stored readings by their identity, in bounded time."""

from typing import Any, LiteralString

import numpy as np
import psycopg

from ingest.database import fetch
from ingest.store.arrays import DamagedBody
from ingest.store.codec import unpack_block
from ingest.store.columns import BoolArray, IntArray, Readings, concatenate
from ingest.store.days.layout import SEQUENCE
from ingest.store.days.open import DayEntry, OpenDay
from ingest.store.read import DamagedStore, read_spans, readings_of_rows

_NEAR_NUMBERS = 5_000
_NEAR_US = 600_000_000

_NUMBERED: LiteralString = """
    WITH asked AS (SELECT * FROM unnest(%s::bigint[], %s::bigint[]) AS span(low, high))
    SELECT DISTINCT ON (block.id) 0, first_at_us, NULL::bigint, NULL::bigint, NULL::bigint, body, block.id,
           NULL::text, 0::bigint, 0::bigint
    FROM asked JOIN ingest_blockboot AS boot ON tap_boot_id = %s AND sequences && int8range(low, high, '[]')
    JOIN ingest_block AS block ON block.id = boot.block_id
    UNION ALL
    SELECT DISTINCT ON (inbox.id) 1, first_at_us, tap_boot_id, arrival_us, crc, body, inbox.id, NULL, 0, 0
    FROM asked JOIN ingest_inboxrow AS inbox ON tap_id = %s AND tap_boot_id = %s
         AND first_sequence <= high AND last_sequence >= low
    UNION ALL
    SELECT 2, first_at_us, size, footer_size, NULL, checks, day.id, name, low, high
    FROM asked JOIN ingest_dayfileboot AS boot ON tap_boot_id = %s AND sequences && int8range(low, high, '[]')
    JOIN ingest_dayfile AS day ON day.id = boot.day_file_id
"""


def numbered_readings(db: psycopg.Connection[Any], tap_id: int, tap_boot: int, sequences: IntArray) -> Readings:
    """Stored readings of a boot that have one of these numbers, sorted by number."""
    spans = _near(np.unique(sequences), _NEAR_NUMBERS)
    rows = fetch(db, _NUMBERED, [low for low, _ in spans], [high for _, high in spans], tap_boot, tap_id, tap_boot, tap_boot)
    by_kind: tuple[list[Any], ...] = ([], [], [])
    for row in rows:
        by_kind[row[0]].append(row)
    blocks, inbox, days = by_kind
    parts = [readings_of_rows(tap_id, inbox)] if inbox else []
    try:
        parts += [unpack_block(row[5]) for row in blocks]
        parts += [_numbered_in_day(own) for own in _by_file(days)]
    except DamagedBody as error:
        raise DamagedStore(f"tap {tap_id}: {error}; restore it from a backup.") from error
    found = concatenate(parts)
    found = found.pick((found.boot_id == tap_boot) & np.isin(found.sequence, sequences))
    return found.pick(np.argsort(found.sequence, kind="stable"))


def _by_file(rows: list[Any]) -> list[list[Any]]:
    files: dict[int, list[Any]] = {}
    for row in rows:
        files.setdefault(row[6], []).append(row)
    return list(files.values())


def _numbered_in_day(rows: list[Any]) -> Readings:
    """Readings of the row groups of one file that may hold a number of the spans asked for."""
    with OpenDay(DayEntry(rows[0][7], rows[0][2], rows[0][3], bytes(rows[0][5]))) as day:
        return day.read(day.groups_by(SEQUENCE, lambda first, last: any(first <= row[9] and last >= row[8] for row in rows)))


def readings_near(db: psycopg.Connection[Any], tap_id: int, at_us: IntArray, tolerance_us: int) -> Readings:
    """Stored readings about these times; a few far apart do not read what lies between."""
    spans = _near(np.unique(at_us), max(_NEAR_US, 2 * tolerance_us + 1))
    return concatenate(read_spans(db, [(tap_id, low - tolerance_us, high + tolerance_us + 1) for low, high in spans]))


def are_same(some: Readings, others: Readings) -> BoolArray:
    """Where two sets of N readings are equal one for one: own stamp and every value (absent equals absent), shape (N,)."""
    same = some.own_at_us == others.own_at_us
    for name in {*some.columns, *others.columns}:
        one, other = some.column(name), others.column(name)
        same &= (one == other) | (np.isnan(one) & np.isnan(other))
    if some.unknown is not None or others.unknown is not None:
        empty = np.full(len(some), "", object)
        same &= ((empty if some.unknown is None else some.unknown)
                 == (empty if others.unknown is None else others.unknown)).astype(np.bool_)
    return same


def _near(numbers: IntArray, gap: int) -> list[tuple[int, int]]:
    """(first, last) of stretches of sorted numbers whose neighbours are at most ``gap`` apart."""
    edges = np.flatnonzero(np.diff(numbers) > gap)
    firsts = numbers[np.concatenate([[0], edges + 1])]
    lasts = numbers[np.concatenate([edges, [len(numbers) - 1]])]
    return list(zip(firsts.tolist(), lasts.tolist(), strict=True))
