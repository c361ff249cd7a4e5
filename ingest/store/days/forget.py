"""Deletes the raw readings of whole past days: file, blocks, and nothing else. Who may ask for it, and when, is decided above."""

from dataclasses import dataclass
from typing import Any

import psycopg
from django.db import transaction

from ingest.database import fetch, shared
from ingest.store.blocks import lock_tap
from ingest.store.days.seal import DAY_US
from ingest.times import now_us


@dataclass(frozen=True, slots=True)
class Forgotten:
    """What was deleted of a day."""

    count: int
    size: int


def days_with_readings(tap_id: int, until_us: int) -> list[int]:
    """Starts of the days before a moment of which the tap still has a file or blocks, oldest first."""
    return [day for (day,) in fetch(shared(), """
        SELECT day_us FROM ingest_dayfile WHERE tap_id = %s AND day_us < %s
        UNION SELECT slot_us - ((slot_us %% 86400000000) + 86400000000) %% 86400000000 FROM ingest_block
        WHERE tap_id = %s AND slot_us < %s ORDER BY 1""", tap_id, until_us, tap_id, until_us)]


def forget_day(tap_id: int, day_us: int, rule: str) -> Forgotten:
    """Delete a day's raw readings and write down that they are no longer kept; the file itself goes with the next sweep.

    Raises:
        RuntimeError: Outside a transaction: the deletion and its audit row must stand or fall together.
    """
    if not transaction.get_connection().in_atomic_block:
        raise RuntimeError("forget_day() must run in the transaction of the audit row that tells of it")
    db: psycopg.Connection[Any] = shared()
    lock_tap(db, tap_id)
    blocks = fetch(db, "SELECT id, count, length(body) FROM ingest_block WHERE tap_id = %s AND slot_us >= %s AND slot_us < %s",
                   tap_id, day_us, day_us + DAY_US)
    files = fetch(db, "SELECT id, count, size FROM ingest_dayfile WHERE tap_id = %s AND day_us = %s", tap_id, day_us)
    for ids, parts, table in (([row[0] for row in blocks], "ingest_blockboot", "block"),
                              ([row[0] for row in files], "ingest_dayfileboot", "day_file")):
        cursor = psycopg.Cursor(db)
        cursor.execute(psycopg.sql.SQL("DELETE FROM {} WHERE {} = ANY(%s::bigint[])").format(
            psycopg.sql.Identifier(parts), psycopg.sql.Identifier(f"{table}_id")), (ids,))
        cursor.execute(psycopg.sql.SQL("DELETE FROM {} WHERE id = ANY(%s::bigint[])").format(
            psycopg.sql.Identifier(f"ingest_{table.replace('_', '')}")), (ids,))
    gone = Forgotten(sum(row[1] for row in blocks + files), sum(row[2] for row in blocks + files))
    fetch(db, """
        INSERT INTO ingest_forgottenday (tap_id, day_us, count, size, rule, forgotten_us) VALUES (%s, %s, %s, %s, %s, %s)
        ON CONFLICT (tap_id, day_us) DO UPDATE SET count = ingest_forgottenday.count + excluded.count,
            size = ingest_forgottenday.size + excluded.size, rule = excluded.rule, forgotten_us = excluded.forgotten_us
        RETURNING 1""", tap_id, day_us, gone.count, gone.size, rule, now_us())
    return gone
