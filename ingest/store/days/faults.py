"""What is known of day files that could not be read, and of days whose raw readings are no longer kept."""

import logging
from collections.abc import Iterable
from typing import Any

import psycopg
from django.db import transaction

from ingest.database import fetch, shared
from ingest.store.read import Hole, HoleKind

log = logging.getLogger(__name__)
_LONGEST = 300


def note_faults(holes: Iterable[Hole]) -> None:
    """Log what was found unreadable, and write it down with its file, so that the health page and later reads know at once."""
    unreadable = [hole for hole in holes if hole.kind is HoleKind.UNREADABLE]
    for hole in unreadable:
        log.error("readings_unreadable", extra={"why": hole.why, "from_us": hole.from_us, "until_us": hole.until_us})
    named = [hole for hole in unreadable if hole.name]
    if named:
        with transaction.atomic():
            set_faults(shared(), [(hole.name, hole.why) for hole in named])


def set_faults(db: psycopg.Connection[Any], faults: list[tuple[str, str]]) -> None:
    """Write down what is wrong with files; an empty text says that nothing is."""
    fetch(db, "UPDATE ingest_dayfile AS day SET fault = found.fault FROM unnest(%s::text[], %s::text[]) AS found(name, fault) "
              "WHERE day.name = found.name AND day.fault <> found.fault RETURNING 1",
          [name for name, _ in faults], [why[:_LONGEST] for _, why in faults])


def known_holes(tap_id: int, from_us: int, until_us: int) -> list[Hole]:
    """Holes of the half-open span that are known without reading it; one query."""
    rows = fetch(shared(), """
        SELECT day_us, day_us + 86399999999, %s, rule, '' FROM ingest_forgottenday
        WHERE tap_id = %s AND day_us > %s - 86400000000 AND day_us < %s
        UNION ALL
        SELECT first_at_us, last_at_us, %s, fault, name FROM ingest_dayfile
        WHERE tap_id = %s AND first_at_us < %s AND last_at_us >= %s AND fault <> '' ORDER BY 1""",
        HoleKind.NOT_KEPT.value, tap_id, from_us, until_us, HoleKind.UNREADABLE.value, tap_id, until_us, from_us)
    return [Hole(row[0], row[1], HoleKind(row[2]), row[3], row[4]) for row in rows]
