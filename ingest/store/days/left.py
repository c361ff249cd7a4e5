"""Files of the storage "days" that no row needs, marked before they are begun and removed when the mark is old."""

import logging
from typing import Any

import psycopg
from django.db import transaction

from ingest.database import fetch, shared
from ingest.store.days.storage import days_storage
from ingest.times import SECOND_US, now_us

log = logging.getLogger(__name__)

LEFT_FOR_S = 6 * 3600
"""A file stays this long after its last use: readers that saw an older row still find it, slow writers finish theirs."""


def mark_left(db: psycopg.Connection[Any], name: str) -> None:
    """Write down that a file may come into being that nobody needs yet."""
    psycopg.Cursor(db).execute("INSERT INTO ingest_leftfile (name, since_us) VALUES (%s, %s)", (name, now_us()))


def take_mark(db: psycopg.Connection[Any], name: str) -> None:
    """Within the transaction that names the file in a row: it is needed now.

    Raises:
        LookupError: The sweep has taken the file meanwhile.
    """
    if not fetch(db, "DELETE FROM ingest_leftfile WHERE name = %s RETURNING 1", name):
        raise LookupError(f"the file {name} was swept away before a row named it")


def sweep_left_files(*, older_s: float = LEFT_FOR_S, limit: int = 1_000) -> int:
    """Remove files whose mark is old; give how many. May run twice, or be killed anywhere: a mark goes after its file."""
    removed = 0
    while removed < limit and _sweep_one(now_us() - int(older_s * SECOND_US)):
        removed += 1
    if removed:
        log.info("left_files_removed", extra={"files": removed})
    return removed


@transaction.atomic
def _sweep_one(before_us: int) -> bool:
    db = shared()
    rows = fetch(db, "DELETE FROM ingest_leftfile WHERE id = (SELECT id FROM ingest_leftfile WHERE since_us < %s "
                     "ORDER BY since_us LIMIT 1 FOR UPDATE SKIP LOCKED) RETURNING name", before_us)
    if not rows:
        return False
    (name,) = rows[0]
    if not fetch(db, "SELECT 1 FROM ingest_dayfile WHERE name = %s", name):
        days_storage().delete(name)
    return True
