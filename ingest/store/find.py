"""Finds stored readings by their identity, in bounded time."""

from collections.abc import Sequence
from typing import Any, LiteralString

import numpy as np
import psycopg

from ingest.database import fetch
from ingest.store.arrays import DamagedBody
from ingest.store.codec import unpack_block
from ingest.store.columns import FloatArray, IntArray, ObjectArray, Readings, concatenate
from ingest.store.read import DamagedStore, read_spans, readings_of_rows

_NEAR_NUMBERS = 5_000
_NEAR_US = 600_000_000

_NUMBERED: LiteralString = """
    WITH asked AS (SELECT * FROM unnest(%s::bigint[], %s::bigint[]) AS span(low, high))
    SELECT DISTINCT ON (block.id) 0, first_at_us, NULL::bigint, NULL::bigint, NULL::bigint, body, block.id
    FROM asked JOIN ingest_blockboot AS boot ON tap_boot_id = %s AND sequences && int8range(low, high, '[]')
    JOIN ingest_block AS block ON block.id = boot.block_id
    UNION ALL
    SELECT DISTINCT ON (inbox.id) 1, first_at_us, tap_boot_id, arrival_us, crc, body, inbox.id
    FROM asked JOIN ingest_inboxrow AS inbox ON tap_id = %s AND tap_boot_id = %s
         AND first_sequence <= high AND last_sequence >= low
"""


def numbered_readings(db: psycopg.Connection[Any], tap_id: int, tap_boot: int, sequences: IntArray) -> Readings:
    """Stored readings of a boot that have one of these numbers, sorted by number."""
    spans = _near(np.unique(sequences), _NEAR_NUMBERS)
    rows = fetch(db, _NUMBERED, [low for low, _ in spans], [high for _, high in spans], tap_boot, tap_id, tap_boot)
    parts = [readings_of_rows(tap_id, [row for row in rows if row[0] == 1])] if any(row[0] == 1 for row in rows) else []
    for row in rows:
        if row[0] == 0:
            try:
                parts.append(unpack_block(row[5]))
            except DamagedBody as error:
                raise DamagedStore(f"tap {tap_id}: {error}; restore the block from a backup.") from error
    found = concatenate(parts)
    found = found.pick((found.boot_id == tap_boot) & np.isin(found.sequence, sequences))
    return found.pick(np.argsort(found.sequence, kind="stable"))


def readings_near(db: psycopg.Connection[Any], tap_id: int, at_us: IntArray, tolerance_us: int) -> Readings:
    """Stored readings about these times; a few far apart do not read what lies between."""
    spans = _near(np.unique(at_us), max(_NEAR_US, 2 * tolerance_us + 1))
    return concatenate(read_spans(db, [(tap_id, low - tolerance_us, high + tolerance_us + 1) for low, high in spans]))


def are_same(names: Sequence[str], values: FloatArray, unknown: ObjectArray | None, stored: Readings) -> Any:
    """Where readings equal stored ones value by value (absent equals absent), shape (N,).

    Args:
        names, values: Columns of the readings, values of shape (columns, N).
        stored: The N readings to compare with, one for one.
    """
    same = np.ones(len(stored), np.bool_)
    for name in {*names, *stored.columns}:
        one = values[names.index(name)] if name in names else np.full(len(stored), np.nan)
        other = stored.column(name)
        same &= (one == other) | (np.isnan(one) & np.isnan(other))
    if unknown is not None or stored.unknown is not None:
        empty = np.full(len(stored), "", object)
        same &= (empty if unknown is None else unknown) == (empty if stored.unknown is None else stored.unknown)
    return same


def _near(numbers: IntArray, gap: int) -> list[tuple[int, int]]:
    """(first, last) of stretches of sorted numbers whose neighbours are at most ``gap`` apart."""
    edges = np.flatnonzero(np.diff(numbers) > gap)
    firsts = numbers[np.concatenate([[0], edges + 1])]
    lasts = numbers[np.concatenate([edges, [len(numbers) - 1]])]
    return list(zip(firsts.tolist(), lasts.tolist(), strict=True))
