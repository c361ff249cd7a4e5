"""The statements of the group commit: each takes whole columns, so their number does not grow with the bodies."""

import base64
import hashlib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any, LiteralString

import msgspec
import psycopg

from ingest.clocks import ClockState
from ingest.database import BigInts, columns_of, fetch
from ingest.door.refusal import Refusal
from ingest.store.boots import multirange_text, station_boot_ids, tap_boot_ids

Ranges = list[tuple[int, int]]
_TOUCH_GAP_US = 60_000_000
MOST_KEPT = 64 << 10
"""Bytes of a refused message that are kept; it was answered as refused, so the station still has it whole."""


@dataclass(slots=True)
class Harvest:
    """Rows that the bodies of one transaction leave behind."""

    inbox: list[tuple[Any, ...]] = field(default_factory=list)
    touches: list[tuple[int, int, int, int]] = field(default_factory=list)
    heard: dict[int, tuple[int, int]] = field(default_factory=dict)
    clocks: list[tuple[Any, ...]] = field(default_factory=list)
    boots: list[tuple[Any, ...]] = field(default_factory=list)
    asides: list[tuple[Any, ...]] = field(default_factory=list)
    unknown: set[tuple[int, str]] = field(default_factory=set)


def lock_clocks(db: psycopg.Connection[Any], station_boots: Iterable[int]) -> dict[int, ClockState]:
    """Clock states of station boots, locked."""
    return {row[0]: ClockState(*row[1:]) for row in fetch(db, _LOCK_CLOCKS, BigInts(sorted(station_boots)))}


def lock_taps(db: psycopg.Connection[Any], taps: list[int]) -> tuple[dict[int, int], dict[int, set[int]]]:
    """Lock taps whose readings are compared by time; give each one's newest time and its TapBoots without boot id."""
    fetch(db, "SELECT id FROM ingest_tap WHERE id = ANY(%b::bigint[]) ORDER BY id FOR NO KEY UPDATE", taps)
    bootless: dict[int, set[int]] = {}
    for tap, boot in fetch(db, _BOOTLESS, taps):
        bootless.setdefault(tap, set()).add(boot)
    return dict(fetch(db, _LAST_TIMES, taps)), bootless


def lock_boots(db: psycopg.Connection[Any], offered: dict[int, Ranges]) -> dict[int, tuple[Ranges, int]]:
    """By TapBoot id, locked: which of the offered numbers it holds already, and the number behind its highest (0: none)."""
    ids = sorted(offered)
    rows = fetch(db, _LOCK_BOOTS, BigInts(ids), [multirange_text(offered[each]) for each in ids])
    return {row: (ranges_in(text), above or 0) for row, text, above in rows}


def write_harvest(db: psycopg.Connection[Any], harvest: Harvest) -> dict[int, int | None]:
    """Write everything in one round trip; give ``through`` by TapBoot id."""
    updated = psycopg.Cursor(db)
    with db.pipeline():
        cursor = psycopg.Cursor(db)
        _write(cursor, _INSERT_INBOX, harvest.inbox)
        _write(cursor, _INSERT_TOUCH, harvest.touches)
        _write(cursor, _UPSERT_HEARD, sorted((tap, *times) for tap, times in harvest.heard.items()))
        _write(cursor, _UPDATE_CLOCKS, harvest.clocks)
        _write(cursor, _INSERT_ASIDE, harvest.asides)
        _write(cursor, _ADD_UNKNOWN, sorted(harvest.unknown))
        _write(updated, _UPDATE_BOOTS, harvest.boots)
    return dict(updated.fetchall()) if harvest.boots else {}


def touches_of(tap: int, times_us: Sequence[int], arrival_us: int) -> list[tuple[int, int, int, int]]:
    """Marks for the pipeline; readings far apart are marked apart, so that nobody works through the years between."""
    if times_us[-1] - times_us[0] <= _TOUCH_GAP_US:
        return [(tap, times_us[0], times_us[-1], arrival_us)]
    marks, first_us = [], times_us[0]
    for before_us, at_us in zip(times_us[:-1], times_us[1:], strict=True):
        if at_us - before_us > 10 * _TOUCH_GAP_US:
            marks.append((tap, first_us, before_us, arrival_us))
            first_us = at_us
    return [*marks, (tap, first_us, times_us[-1], arrival_us)]


def note_refused(db: psycopg.Connection[Any], station_id: int, boot: str, lowest: dict[int, int], arrival_us: int) -> None:
    """Keep the smallest numbers of a refused body, so that ``through`` never reaches beyond them."""
    station_boot = station_boot_ids(db, [(station_id, boot)], arrival_us)[station_id, boot]
    ids = tap_boot_ids(db, [(tap, station_boot) for tap in lowest])
    _write(psycopg.Cursor(db), _LOWER, sorted((row, lowest[tap]) for (tap, _), row in ids.items()))


def keep_message(db: psycopg.Connection[Any], station_id: int, message: bytes, refusal: Refusal, arrival_us: int) -> None:
    """Set a message aside that was refused whole: in base64, and the same message once; of a very long one the beginning."""
    kept = {"message_base64": base64.b64encode(message[:MOST_KEPT]).decode(), "bytes": len(message),
            "is_whole": len(message) <= MOST_KEPT}
    _write(psycopg.Cursor(db), _INSERT_ASIDE, [(
        station_id, None, "", None, arrival_us, refusal.at[:100], refusal.title[:300], refusal.detail[:300],
        msgspec.json.encode(kept).decode(), hashlib.blake2b(message, digest_size=16).digest())])


def ranges_in(text: str) -> Ranges:
    """Closed ranges of PostgreSQL's text of a multirange, as in ``{[1,5),[7,9)}``."""
    if text == "{}":
        return []
    return [(int(low), int(high) - 1) for low, high in (pair.split(",") for pair in text[2:-2].split("),["))]


def _write(cursor: psycopg.Cursor[Any], statement: LiteralString, rows: Sequence[tuple[Any, ...]]) -> None:
    if rows:
        cursor.execute(statement, columns_of(rows), binary=True)


_LOCK_CLOCKS: LiteralString = """
    SELECT id, is_server_timed, clock_fault, clock_offset_us, uptime_zero_us, uptime_last_ms, last_arrival_us
    FROM ingest_stationboot WHERE id = ANY(%b::bigint[]) ORDER BY id FOR NO KEY UPDATE"""
_LOCK_BOOTS: LiteralString = """
    SELECT id, (held * ranges::int8multirange)::text, upper(held)
    FROM ingest_tapboot AS kept JOIN unnest(%b::bigint[], %b::text[]) AS asked(boot, ranges) ON id = boot
    ORDER BY id FOR NO KEY UPDATE OF kept"""
_LAST_TIMES: LiteralString = "SELECT tap_id, last_at_us FROM ingest_tapheard WHERE tap_id = ANY(%b::bigint[])"
_BOOTLESS: LiteralString = """
    SELECT tap_id, kept.id FROM ingest_tapboot AS kept JOIN ingest_stationboot AS station ON station.id = station_boot_id
    WHERE tap_id = ANY(%b::bigint[]) AND station.boot = ''"""
_INSERT_INBOX: LiteralString = """
    INSERT INTO ingest_inboxrow (tap_id, tap_boot_id, first_sequence, last_sequence, first_at_us, last_at_us, count,
                                 arrival_us, crc, body)
    SELECT * FROM unnest(%b::bigint[], %b::bigint[], %b::bigint[], %b::bigint[], %b::bigint[], %b::bigint[], %b::int[],
                         %b::bigint[], %b::bigint[], %b::bytea[])"""
_INSERT_TOUCH: LiteralString = """
    INSERT INTO ingest_touch (tap_id, first_at_us, last_at_us, arrival_us)
    SELECT * FROM unnest(%b::bigint[], %b::bigint[], %b::bigint[], %b::bigint[])"""
_UPSERT_HEARD: LiteralString = """
    INSERT INTO ingest_tapheard AS kept (tap_id, last_arrival_us, last_at_us)
    SELECT * FROM unnest(%b::bigint[], %b::bigint[], %b::bigint[])
    ON CONFLICT (tap_id) DO UPDATE SET last_arrival_us = greatest(kept.last_arrival_us, excluded.last_arrival_us),
                                       last_at_us = greatest(kept.last_at_us, excluded.last_at_us)"""
_UPDATE_CLOCKS: LiteralString = """
    UPDATE ingest_stationboot SET is_server_timed = timed, clock_fault = fault, clock_offset_us = offset_us,
           uptime_zero_us = zero_us, uptime_last_ms = uptime_ms, last_arrival_us = arrival_us,
           firmware = CASE WHEN row.firmware = '' THEN ingest_stationboot.firmware ELSE row.firmware END,
           remote_address = address
    FROM unnest(%b::bigint[], %b::bool[], %b::text[], %b::bigint[], %b::bigint[], %b::bigint[], %b::bigint[], %b::text[],
                %b::text[]) AS row(boot_id, timed, fault, offset_us, zero_us, uptime_ms, arrival_us, firmware, address)
    WHERE id = boot_id"""
_UPDATE_BOOTS: LiteralString = """
    UPDATE ingest_tapboot SET held = held + gained::int8multirange, first_at_us = least(first_at_us, low_us),
           last_at_us = greatest(last_at_us, high_us), lowest_sequence = least(lowest_sequence, lowest)
    FROM unnest(%b::bigint[], %b::text[], %b::bigint[], %b::bigint[], %b::bigint[])
         AS row(boot, gained, low_us, high_us, lowest)
    WHERE id = boot
    RETURNING id, CASE WHEN lower(held) <= lowest_sequence
                       THEN (SELECT upper(first) - 1 FROM unnest(held) AS first LIMIT 1) END"""
_INSERT_ASIDE: LiteralString = """
    INSERT INTO ingest_setaside (station_id, tap_id, boot, sequence, arrival_us, field, why, "do", reading, digest)
    SELECT station, tap, boot, sequence, arrival_us, field, why, what, reading::jsonb, digest
    FROM unnest(%b::bigint[], %b::bigint[], %b::text[], %b::bigint[], %b::bigint[], %b::text[], %b::text[], %b::text[],
                %b::text[], %b::bytea[])
         AS row(station, tap, boot, sequence, arrival_us, field, why, what, reading, digest)
    ON CONFLICT (station_id, digest) DO NOTHING"""
_ADD_UNKNOWN: LiteralString = """
    UPDATE ingest_tap SET unknown_columns = ARRAY(SELECT DISTINCT unnest(unknown_columns::text[] || names) ORDER BY 1 LIMIT 200)
    FROM (SELECT tap, array_agg(name) AS names FROM unnest(%b::bigint[], %b::text[]) AS row(tap, name) GROUP BY tap) AS row
    WHERE id = tap AND NOT unknown_columns::text[] @> names"""
_LOWER: LiteralString = """
    UPDATE ingest_tapboot SET lowest_sequence = least(lowest_sequence, low)
    FROM unnest(%b::bigint[], %b::bigint[]) AS row(boot, low) WHERE id = boot"""
