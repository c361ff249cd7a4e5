"""Moves readings from the inbox into blocks; may run twice, or in several workers at once."""

import logging
from typing import Any

import psycopg
from django.db import transaction

from ingest.database import fetch, shared
from ingest.store.blocks import lock_tap, merge_into_blocks
from ingest.store.read import DamagedStore, readings_of_rows
from ingest.times import SECOND_US, now_us

log = logging.getLogger(__name__)

SEAL_AFTER_S = 300
"""Readings wait this long in the inbox, so that a block is rewritten a few times only."""
MANY_ROWS = 1_000
"""A tap with more waiting batches is sealed at once."""
_STEP_ROWS = 2_000


def seal_inbox(limit: int = 50, *, after_s: float = SEAL_AFTER_S) -> int:
    """Seal the taps whose readings have waited long enough, at most ``limit`` of them; give how many were sealed."""
    rows = fetch(shared(), "SELECT tap_id FROM ingest_inboxrow GROUP BY tap_id "
                           "HAVING min(arrival_us) <= %s OR count(*) > %s ORDER BY min(arrival_us) LIMIT %s",
                 now_us() - int(after_s * SECOND_US), MANY_ROWS, limit)
    return sum(_seal_or_log(tap_id) for (tap_id,) in rows)


def seal_tap(tap_id: int) -> int:
    """Move all of a tap's inbox rows into blocks; give the number of readings moved."""
    moved = 0
    while step := _seal_step(tap_id):
        moved += step
    return moved


def _seal_or_log(tap_id: int) -> bool:
    """One damaged tap must not stop the others."""
    try:
        return seal_tap(tap_id) > 0
    except DamagedStore:
        log.exception("sealing_failed", extra={"tap_id": tap_id})
        return False


@transaction.atomic
def _seal_step(tap_id: int) -> int:
    """One transaction: blocks written, inbox rows gone."""
    db: psycopg.Connection[Any] = shared()
    lock_tap(db, tap_id)
    rows = fetch(db, "SELECT 1, first_at_us, tap_boot_id, arrival_us, crc, body, id FROM ingest_inboxrow "
                     "WHERE tap_id = %s ORDER BY last_at_us LIMIT %s", tap_id, _STEP_ROWS)
    if not rows:
        return 0
    readings = readings_of_rows(tap_id, rows)
    slot_s = merge_into_blocks(db, tap_id, readings)
    cursor = psycopg.Cursor(db)
    cursor.execute("DELETE FROM ingest_inboxrow WHERE id = ANY(%s::bigint[])", ([row[6] for row in rows],))
    cursor.execute("UPDATE ingest_tap SET slot_s = %s WHERE id = %s AND slot_s <> %s", (slot_s, tap_id, slot_s))
    return len(readings)
