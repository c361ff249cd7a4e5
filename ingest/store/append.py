"""Readings that do not come through the door: files, and history written straight into blocks."""

from collections.abc import Mapping
from typing import Any

import numpy as np
import psycopg
from django.db import transaction

from ingest.database import shared
from ingest.models import Tap
from ingest.store.blocks import lock_tap, merge_into_blocks
from ingest.store.boots import multirange_text, ranges_of, station_boot_ids, tap_boot_ids
from ingest.store.columns import NO_SEQUENCE, IntArray, Readings
from ingest.times import now_us


@transaction.atomic
def write_blocks(tap: Tap, at_us: IntArray, columns: Mapping[str, Any], *, boot: str = "",
                 sequence: IntArray | None = None, arrival_us: IntArray | int | None = None,
                 own_at_us: IntArray | None = None, is_server_timed: bool = False, is_touched: bool = True) -> int:
    """Write history straight into blocks; for stretches the tap has no readings of yet, whose identities are new.

    Args:
        tap: A saved tap.
        at_us: Times of the readings, us since 1970, shape (N,).
        columns: Values by column name, float64 or float32, shape (N,), NaN where absent.
        boot, sequence: Identity; without sequence a reading is known by its time.
        arrival_us: When they came in (default: now), us, one number or shape (N,).
        own_at_us: The station's own stamps where they differ from ``at_us``, us, shape (N,).
        is_server_timed: The station's clock was not used for ``at_us``.
        is_touched: Leave a mark, so that the pipeline reduces and judges them.
    Returns:
        The number of readings written.
    """
    if not len(at_us):
        return 0
    db = shared()
    arrival = np.broadcast_to(np.asarray(now_us() if arrival_us is None else arrival_us, np.int64), at_us.shape)
    numbers = np.full(at_us.shape, NO_SEQUENCE, np.int64) if sequence is None else np.asarray(sequence, np.int64)
    station_boot = station_boot_ids(db, [(tap.station_id, boot)], int(arrival[0]))[tap.station_id, boot]
    tap_boot = tap_boot_ids(db, [(tap.pk, station_boot)])[tap.pk, station_boot]
    readings = Readings(at_us=np.asarray(at_us, np.int64), columns={name: np.asarray(values) for name, values in columns.items()},
                        boot_id=np.full(at_us.shape, tap_boot, np.int64), sequence=numbers,
                        own_at_us=np.asarray(at_us if own_at_us is None else own_at_us, np.int64), arrival_us=arrival,
                        sent_us=arrival, is_server_timed=np.full(at_us.shape, is_server_timed, np.bool_)).sorted()
    lock_tap(db, tap.pk)
    slot_s = merge_into_blocks(db, tap.pk, readings)
    _note(db, tap.pk, tap_boot, readings, slot_s, is_touched)
    return len(readings)


def _note(db: psycopg.Connection[Any], tap_id: int, tap_boot: int, readings: Readings, slot_s: int, is_touched: bool) -> None:
    """Held numbers, spans and marks that belong to new blocks."""
    first_us, last_us = int(readings.at_us[0]), int(readings.at_us[-1])
    held = ranges_of(readings.sequence[readings.sequence != NO_SEQUENCE])
    last_arrival_us = int(readings.arrival_us.max())
    cursor = psycopg.Cursor(db)
    cursor.execute("UPDATE ingest_tap SET slot_s = %s WHERE id = %s AND slot_s <> %s", (slot_s, tap_id, slot_s))
    cursor.execute(
        "UPDATE ingest_tapboot SET held = held + %s::int8multirange, first_at_us = least(first_at_us, %s), "
        "last_at_us = greatest(last_at_us, %s), lowest_sequence = least(lowest_sequence, %s) WHERE id = %s",
        (multirange_text(held), first_us, last_us, held[0][0] if held else None, tap_boot))
    cursor.execute(
        "INSERT INTO ingest_tapheard (tap_id, last_arrival_us, last_at_us) VALUES (%s, %s, %s) "
        "ON CONFLICT (tap_id) DO UPDATE SET last_at_us = greatest(ingest_tapheard.last_at_us, excluded.last_at_us), "
        "last_arrival_us = greatest(ingest_tapheard.last_arrival_us, excluded.last_arrival_us)",
        (tap_id, last_arrival_us, last_us))
    if is_touched:
        cursor.execute("INSERT INTO ingest_touch (tap_id, first_at_us, last_at_us, arrival_us) VALUES (%s, %s, %s, %s)",
                       (tap_id, first_us, last_us, last_arrival_us))
