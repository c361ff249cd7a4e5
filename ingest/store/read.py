"""The one reader of raw readings: day files, blocks and inbox together, sorted, each reading once.

All parts are fetched by one statement, so by one snapshot: while sealing moves rows from the inbox into blocks and from blocks
into day files, a reader sees them before or after, never twice and never not at all. (A file that a later sealing replaced stays
for hours: whoever saw the older row can still open it.) That each identity is stored once is the writers' promise
(``ingest.door.commit``), not repaired here.

What cannot be read is a hole with its reason: ``find_spans`` gives holes beside the readings, ``read_spans`` refuses them.
"""

import logging
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Any, LiteralString

import numpy as np
import psycopg

from ingest.database import fetch, shared
from ingest.store.arrays import DamagedBody
from ingest.store.codec import Batch, unpack_batch, unpack_block
from ingest.store.columns import FloatArray, ObjectArray, Readings, concatenate, no_readings
from ingest.store.days.open import DayEntry, OpenDay, read_day
from ingest.times import rfc3339_of

log = logging.getLogger(__name__)

LONGEST_SLOT_US = 86_400_000_000
_TIME_LIMIT_US = 1 << 62
_BLOCK, _INBOX, _DAY, _FORGOTTEN = range(4)

# Rows: place, first_at_us, boot (of a day file: its size), arrival_us (of a day file: size of its footer), crc, body (of a day
# file: its checks), kind, last_at_us, name.
_PARTS: LiteralString = """
    WITH asked AS (SELECT * FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[]) WITH ORDINALITY
                   AS span(tap, from_us, until_us, place))
    SELECT place::int, first_at_us, NULL::bigint AS boot, NULL::bigint AS arrival_us, NULL::bigint AS crc, body, 0 AS kind,
           last_at_us, NULL::text AS name
    FROM asked JOIN ingest_block ON tap_id = tap AND first_at_us < until_us
         AND last_at_us >= from_us AND last_at_us < until_us + 86400000000
    UNION ALL
    SELECT place::int, first_at_us, tap_boot_id, arrival_us, crc, body, 1, last_at_us, NULL
    FROM asked JOIN ingest_inboxrow ON tap_id = tap AND first_at_us < until_us AND last_at_us >= from_us
    UNION ALL
    SELECT place::int, first_at_us, size, footer_size, NULL, checks, 2, last_at_us, name
    FROM asked JOIN ingest_dayfile ON tap_id = tap AND day_us > from_us - 86400000000 AND day_us < until_us
         AND first_at_us < until_us AND last_at_us >= from_us
    UNION ALL
    SELECT place::int, day_us, NULL, NULL, NULL, NULL, 3, day_us + 86399999999, rule
    FROM asked JOIN ingest_forgottenday ON tap_id = tap AND day_us > from_us - 86400000000 AND day_us < until_us
"""
_NEWEST: LiteralString = """
    SELECT place::int, first_at_us, NULL::bigint AS boot, NULL::bigint AS arrival_us, NULL::bigint AS crc, body, 0 AS kind,
           last_at_us, NULL::text AS name
    FROM unnest(%s::bigint[]) WITH ORDINALITY AS asked(tap, place), LATERAL (
        SELECT first_at_us, last_at_us, body, sum(count) OVER (ORDER BY last_at_us DESC) - count AS newer
        FROM (SELECT * FROM ingest_block WHERE tap_id = tap ORDER BY last_at_us DESC LIMIT %s) AS last_blocks) AS blocks
    WHERE newer < %s
    UNION ALL
    SELECT place::int, first_at_us, tap_boot_id, arrival_us, crc, body, 1, last_at_us, NULL
    FROM unnest(%s::bigint[]) WITH ORDINALITY AS asked(tap, place), LATERAL (
        SELECT * FROM ingest_inboxrow WHERE tap_id = tap ORDER BY last_at_us DESC LIMIT %s) AS rows
    UNION ALL
    SELECT place::int, first_at_us, size, footer_size, NULL, checks, 2, last_at_us, name
    FROM unnest(%s::bigint[]) WITH ORDINALITY AS asked(tap, place), LATERAL (
        SELECT *, sum(count) OVER (ORDER BY last_at_us DESC) - count AS newer
        FROM (SELECT * FROM ingest_dayfile WHERE tap_id = tap ORDER BY last_at_us DESC LIMIT %s) AS last_days) AS days
    WHERE newer < %s
"""


class DamagedStore(RuntimeError):
    """Stored readings cannot be read back as written; the message names the tap, the time and what to do."""


class HoleKind(StrEnum):
    """Why there are no readings where there were some."""

    UNREADABLE = "unreadable"
    NOT_KEPT = "raw no longer kept"


@dataclass(frozen=True, slots=True)
class Hole:
    """A stretch of time, us, both ends included, of which stored readings cannot be had, and why."""

    from_us: int
    until_us: int
    kind: HoleKind
    why: str
    name: str = ""
    """The day file at fault, empty where it is none."""


@dataclass(frozen=True, slots=True)
class Found:
    """Readings of a span, and the holes among them."""

    readings: Readings
    holes: tuple[Hole, ...] = ()

    @property
    def unreadable(self) -> tuple[Hole, ...]:
        """Holes that are a fault, not somebody's rule."""
        return tuple(hole for hole in self.holes if hole.kind is HoleKind.UNREADABLE)


def read_readings(tap_id: int, from_us: int, until_us: int, *, columns: Sequence[str] | None = None) -> Readings:
    """A tap's readings of the half-open span; ``columns`` limits which are decoded (None: all).

    Raises:
        DamagedStore: Some of them cannot be read.
    """
    return read_spans(shared(), [(tap_id, from_us, until_us)], columns)[0]


def find_readings(tap_id: int, from_us: int, until_us: int, *, columns: Sequence[str] | None = None) -> Found:
    """The same with holes instead of an exception."""
    return find_spans(shared(), [(tap_id, from_us, until_us)], columns)[0]


def read_many(spans: Mapping[int, tuple[int, int]], *, columns: Sequence[str] | None = None) -> dict[int, Readings]:
    """Readings by tap id, each in its own half-open span; one query however many taps.

    Raises:
        DamagedStore: Some of them cannot be read.
    """
    return {tap: _without_holes(tap, found) for tap, found in find_many(spans, columns=columns).items()}


def find_many(spans: Mapping[int, tuple[int, int]], *, columns: Sequence[str] | None = None) -> dict[int, Found]:
    """The same with holes instead of an exception."""
    asked = [(tap, from_us, until_us) for tap, (from_us, until_us) in spans.items()]
    return dict(zip(spans, find_spans(shared(), asked, columns), strict=True))


def newest_readings(tap_ids: Iterable[int], *, count: int = 1) -> dict[int, Readings]:
    """The ``count`` newest readings by data time of each tap (fewer where there are fewer); one query.

    Those that cannot be read are left out and logged: these are readings to look at, not to reckon with.
    """
    taps = list(tap_ids)
    rows = fetch(shared(), _NEWEST, taps, count, count, taps, count, taps, count, count)
    found = _assemble(rows, taps, None, last=count)
    for hole in (hole for one in found for hole in one.unreadable):
        log.error("readings_unreadable", extra={"why": hole.why, "from_us": hole.from_us, "until_us": hole.until_us})
    return {tap: one.readings.pick(slice(-count, None)) for tap, one in zip(taps, found, strict=True)}


def read_spans(db: psycopg.Connection[Any], spans: Sequence[tuple[int, int, int]],
               columns: Sequence[str] | None = None) -> list[Readings]:
    """Readings of spans (tap id, from, until), in the order asked; a tap may be asked several times.

    Raises:
        DamagedStore: Some of them cannot be read.
    """
    return [_without_holes(tap, found) for (tap, _, _), found in zip(spans, find_spans(db, spans, columns), strict=True)]


def find_spans(db: psycopg.Connection[Any], spans: Sequence[tuple[int, int, int]],
               columns: Sequence[str] | None = None) -> list[Found]:
    """The same with holes instead of an exception. Files are opened only where they reach into a span."""
    taps = [tap for tap, _, _ in spans]
    starts = [max(from_us, -_TIME_LIMIT_US) for _, from_us, _ in spans]
    ends = [min(until_us, _TIME_LIMIT_US) for _, _, until_us in spans]
    rows = fetch(db, _PARTS, taps, starts, ends)
    found = _assemble(rows, taps, columns, list(zip(starts, ends, strict=True)))
    return [Found(one.readings.between(from_us, until_us), one.holes)
            for one, from_us, until_us in zip(found, starts, ends, strict=True)]


def _without_holes(tap: int, found: Found) -> Readings:
    if found.unreadable:
        raise DamagedStore("; ".join(hole.why for hole in found.unreadable))
    return found.readings


def _assemble(rows: list[tuple[Any, ...]], taps: Sequence[int], columns: Sequence[str] | None,
              spans: Sequence[tuple[int, int]] = (), *, last: int = 0) -> list[Found]:
    """Readings per asked place from the rows; of day files those of the span, or the ``last`` ones."""
    by_place: dict[int, tuple[list[Any], ...]] = {}
    for row in rows:
        by_place.setdefault(row[0] - 1, ([], [], [], []))[row[6]].append(row)
    wanted = None if columns is None else frozenset(columns)
    made = []
    for place, tap in enumerate(taps):
        if place not in by_place:
            made.append(Found(no_readings(columns)))
            continue
        blocks, inbox, days, forgotten = (sorted(own, key=lambda row: row[1]) for own in by_place[place])
        holes = [Hole(row[1], row[7], HoleKind.NOT_KEPT, row[8]) for row in forgotten]
        parts = [_opened_block(tap, row, wanted, holes) for row in blocks]
        if inbox:
            parts.append(_opened_inbox(tap, inbox, wanted, holes))
        for row in days if spans else reversed(days):
            if spans or not _are_newer(parts, row[7], last):
                parts.insert(0, _opened_day(tap, row, wanted, spans[place] if spans else None, last, holes))
        made.append(Found(concatenate(parts).sorted() if any(map(len, parts)) else no_readings(columns), tuple(holes)))
    return made


def _are_newer(parts: list[Readings], at_us: int, count: int) -> bool:
    """True if there are ``count`` readings later than a moment already: an older file need not be opened."""
    return sum(int((part.at_us > at_us).sum()) for part in parts) >= count


def _opened_day(tap: int, row: tuple[Any, ...], wanted: frozenset[str] | None, span: tuple[int, int] | None, last: int,
                holes: list[Hole]) -> Readings:
    entry = DayEntry(row[8], row[2], row[3], bytes(row[5]))
    try:
        if span is not None:
            return read_day(entry, *span, wanted)
        with OpenDay(entry) as day:
            return day.read_last(last, wanted)
    except DamagedBody as error:
        holes.append(Hole(row[1], row[7], HoleKind.UNREADABLE, _damage(tap, row, "day file", error, "file"), row[8]))
        return no_readings()


def _opened_block(tap: int, row: tuple[Any, ...], wanted: frozenset[str] | None, holes: list[Hole]) -> Readings:
    try:
        return unpack_block(row[5], wanted)
    except DamagedBody as error:
        holes.append(Hole(row[1], row[7], HoleKind.UNREADABLE, _damage(tap, row, "block", error)))
        return no_readings()


def _opened_inbox(tap: int, rows: list[tuple[Any, ...]], wanted: frozenset[str] | None, holes: list[Hole]) -> Readings:
    """All rows together; where one is damaged, each by itself."""
    try:
        return readings_of_rows(tap, rows, wanted)
    except DamagedStore as error:
        if len(rows) == 1:
            holes.append(Hole(rows[0][1], rows[0][7], HoleKind.UNREADABLE, str(error)))
            return no_readings()
    return concatenate([_opened_inbox(tap, [row], wanted, holes) for row in rows])


def readings_of_rows(tap: int, rows: list[tuple[Any, ...]], wanted: frozenset[str] | None = None) -> Readings:
    """Readings of inbox rows (…, first_at_us, boot, arrival_us, crc, body, …), in the rows' order."""
    batches = []
    for row in rows:
        try:
            batches.append(unpack_batch(row[5], row[4]))
        except DamagedBody as error:
            raise DamagedStore(_damage(tap, row, "batch", error)) from error
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


def _damage(tap: int, row: tuple[Any, ...], what: str, error: DamagedBody, thing: str = "row") -> str:
    return (f"tap {tap}, {what} from {rfc3339_of(row[1])}: {error}. The disk or a copy is damaged: "
            f"restore this {thing} from a backup; the rest of the tap is not affected.")
