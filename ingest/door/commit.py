"""Stores checked bodies in the caller's transaction: the only writer of inbox rows, held ranges and clock states.

Locks are taken in one order everywhere (station boots, taps, tap boots, each sorted by id), so that any number of doors
may commit at once. Everything a body leaves behind is written by a handful of statements, however many bodies there are.
"""

import zlib
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, LiteralString

import numpy as np
import psycopg

from ingest.aside import Aside
from ingest.clocks import ClockState, observe, place
from ingest.database import fetch
from ingest.door.identity import AFTER_NOW, Fault, Lot, judge_by_time, judge_numbered
from ingest.door.payload import Body, Part, aside_of
from ingest.store.boots import StationBootKey, TapBootKey, multirange_text, ranges_of, station_boot_ids, tap_boot_ids
from ingest.store.codec import Batch, pack_batch
from ingest.store.columns import NO_SEQUENCE, IntArray, Readings

Ranges = list[tuple[int, int]]
_TOUCH_GAP_US = 60_000_000


class StaleIds(Exception):
    """Row ids kept from an earlier transaction are gone (a station was removed): find them anew."""


@dataclass(slots=True)
class Ids:
    """Row ids found before, and unknown columns already noted; grows by ``adopt`` after a commit only."""

    station_boots: dict[StationBootKey, int] = field(default_factory=dict)
    tap_boots: dict[TapBootKey, int] = field(default_factory=dict)
    unknown: set[tuple[int, str]] = field(default_factory=set)

    def adopt(self, other: "Ids") -> None:
        """Keep what a committed transaction found; forget all when there is too much."""
        if len(self.station_boots) > 20_000 or len(self.tap_boots) > 100_000 or len(self.unknown) > 100_000:
            self.__init__()  # type: ignore[misc]
        self.station_boots |= other.station_boots
        self.tap_boots |= other.tap_boots
        self.unknown |= other.unknown


@dataclass(slots=True)
class Answer:
    """What became of one body."""

    boot: str
    stored: int = 0
    known: int = 0
    aside: list[Aside] = field(default_factory=list)
    ranges: dict[str, Ranges] = field(default_factory=dict)
    """By tap: numbers of this body that are acknowledged."""
    through: dict[str, int] = field(default_factory=dict)
    """By tap: end of the unbroken range held since the boot's first number."""


@dataclass(slots=True)
class _BootState:
    """A tap's boot within this transaction."""

    tap_id: int
    held: Ranges
    gained: list[IntArray] = field(default_factory=list)
    pending: list[Readings] = field(default_factory=list)
    first_at_us: int = (1 << 63) - 1
    last_at_us: int = -(1 << 63)
    lowest: int | None = None
    through: int | None = None


class Transaction:
    """One commit of some bodies; ``run`` once."""

    def __init__(self, db: psycopg.Connection[Any], bodies: Sequence[Body], known_ids: Ids) -> None:
        self.db, self.bodies, self.known_ids, self.found_ids = db, bodies, known_ids, Ids()
        self.clocks: dict[int, ClockState] = {}
        self.boots: dict[int, _BootState] = {}
        self.last_at_us: dict[int, int] = {}
        self.bootless: dict[int, set[int]] = {}
        self.pending_by_tap: dict[int, list[Readings]] = {}
        self.inbox: list[tuple[Any, ...]] = []
        self.touches: list[tuple[int, int, int, int]] = []
        self.heard: dict[int, tuple[int, int]] = {}
        self.boot_of_body: list[int] = []
        self.new_names: set[tuple[int, str]] = set()

    def run(self) -> list[Answer]:
        """Store the bodies and answer each.

        Raises:
            StaleIds: Start again with empty ids.
        """
        self._find_ids()
        self._lock()
        answers = [self._take(body, boot) for body, boot in zip(self.bodies, self.boot_of_body, strict=True)]
        self._write()
        self._write_asides(answers)
        for body, boot, answer in zip(self.bodies, self.boot_of_body, answers, strict=True):
            self._add_through(body, boot, answer)
        return answers

    def _find_ids(self) -> None:
        """Row ids of all boots, made where missing."""
        wanted = {(body.station.id, body.boot) for body in self.bodies}
        station_boots = {key: self.known_ids.station_boots[key] for key in wanted if key in self.known_ids.station_boots}
        if missing := wanted - station_boots.keys():
            made = station_boot_ids(self.db, missing, self.bodies[0].sending.arrival_us)
            self.found_ids.station_boots |= made
            station_boots |= made
        self.boot_of_body = [station_boots[body.station.id, body.boot] for body in self.bodies]
        taps = {(part.tap.id, boot) for body, boot in zip(self.bodies, self.boot_of_body, strict=True) for part in body.parts}
        self.tap_boots = {key: self.known_ids.tap_boots[key] for key in taps if key in self.known_ids.tap_boots}
        if absent := taps - self.tap_boots.keys():
            made_taps = tap_boot_ids(self.db, absent)
            self.found_ids.tap_boots |= made_taps
            self.tap_boots |= made_taps

    def _lock(self) -> None:
        """Lock and read what this transaction decides by."""
        boots = sorted(set(self.boot_of_body))
        rows = fetch(self.db, "SELECT id, is_server_timed, clock_fault, clock_offset_us, uptime_zero_us, uptime_last_ms, "
                              "last_arrival_us FROM ingest_stationboot WHERE id = ANY(%s::bigint[]) ORDER BY id "
                              "FOR NO KEY UPDATE", boots)
        self.clocks = {row[0]: ClockState(*row[1:]) for row in rows}
        self.new_names = {(part.tap.id, name) for body in self.bodies for part in body.parts for name in part.unknown_names
                          if len(part.rows)} - self.known_ids.unknown
        by_time = {part.tap.id for body in self.bodies for part in body.parts if _has_unnumbered(body, part)}
        if taps := sorted(by_time | {tap for tap, _ in self.new_names}):
            self._lock_taps(taps)
        asked: dict[int, Ranges] = {}
        for body, boot in zip(self.bodies, self.boot_of_body, strict=True):
            for part in body.parts:
                asked.setdefault(self.tap_boots[part.tap.id, boot], []).extend(_offered(body, part))
        ids = sorted(asked)
        held = fetch(self.db, "SELECT id, kept.tap_id, (held * ranges::int8multirange)::text FROM ingest_tapboot AS kept "
                              "JOIN unnest(%s::bigint[], %s::text[]) AS asked(boot, ranges) ON id = boot ORDER BY id "
                              "FOR NO KEY UPDATE OF kept", ids, [multirange_text(asked[each]) for each in ids])
        self.boots = {row: _BootState(tap, _ranges_in(text)) for row, tap, text in held}
        if len(self.clocks) < len(boots) or len(self.boots) < len(ids):
            raise StaleIds

    def _lock_taps(self, taps: list[int]) -> None:
        """Readings known by time are compared with all of a tap: one at a time."""
        fetch(self.db, "SELECT id FROM ingest_tap WHERE id = ANY(%s::bigint[]) ORDER BY id FOR NO KEY UPDATE", taps)
        self.last_at_us = dict(fetch(self.db, _LAST_TIMES, taps))
        for tap, boot in fetch(self.db, _BOOTLESS, taps):
            self.bootless.setdefault(tap, set()).add(boot)

    def _take(self, body: Body, station_boot: int) -> Answer:
        """Decide about one body."""
        state = self.clocks[station_boot] = observe(self.clocks[station_boot], body.sending)
        placed = place(state, body.sending, body.own_at_us, body.uptime_ms)
        answer, start = Answer(body.boot), 0
        for part in body.parts:
            end = start + len(part.rows)
            boot_id = self.tap_boots[part.tap.id, station_boot]
            faults: dict[int, Fault] = {}
            if placed.is_impossible[start:end].any():
                faults = dict.fromkeys(np.flatnonzero(placed.is_impossible[start:end]).tolist(), AFTER_NOW)
            at_us, timed = placed.at_us[start:end], placed.is_server_timed[start:end]
            for lot in _lots(body, part, at_us, timed, faults):
                sent_us = placed.sent_server_us if lot.is_server_timed else placed.sent_own_us
                self._take_lot(body, lot, boot_id, sent_us, answer, faults)
            self._finish_part(body, part, boot_id, faults, answer)
            start = end
        return answer

    def _take_lot(self, body: Body, lot: Lot, boot_id: int, sent_us: int, answer: Answer, faults: dict[int, Fault]) -> None:
        """New readings of a lot to the inbox; the others counted or put among the faults."""
        state, tap = self.boots[boot_id], lot.part.tap.id
        if lot.is_numbered:
            verdict = judge_numbered(self.db, lot, boot_id, state.held, state.pending)
        else:
            verdict = judge_by_time(self.db, lot, self.last_at_us.get(tap), self.bootless.get(tap, set()),
                                    self.pending_by_tap.get(tap, []))
        answer.known += verdict.known
        faults |= {int(lot.places[place]): fault for place, fault in verdict.faulty.items()}
        if not len(verdict.new):
            return
        answer.stored += len(verdict.new)
        whole = len(verdict.new) == len(lot.part.rows)
        self._add_inbox(body, lot, boot_id, sent_us, verdict.new, whole)
        if lot.is_numbered:
            numbers = lot.part.sequence if whole else lot.part.sequence[lot.places[verdict.new]]
            state.gained.append(numbers)
            state.held += ranges_of(numbers)

    def _add_inbox(self, body: Body, lot: Lot, boot_id: int, sent_us: int, new: IntArray, whole: bool) -> None:
        part, arrival_us = lot.part, body.sending.arrival_us
        places = lot.places if whole else lot.places[new]
        at_us = lot.at_us if whole else lot.at_us[new]
        values = part.values if whole else part.values[:, places]
        names, uptime_ms = part.names, part.uptime_ms if whole else part.uptime_ms[places]
        if int(uptime_ms.max()) >= 0:
            names = (*names, "uptime_ms")
            values = np.vstack([values, np.where(uptime_ms >= 0, uptime_ms, np.nan)])
        sequence = part.sequence if whole else part.sequence[places]
        own_at_us = part.own_at_us if whole else part.own_at_us[places]
        unknown = lot.unknown(places)
        packed = pack_batch(Batch(at_us, names, values, sequence, own_at_us, sent_us, lot.is_server_timed, unknown))
        low, high = int(at_us.min()), int(at_us.max())
        first, last = (int(sequence.min()), int(sequence.max())) if lot.is_numbered else (None, None)
        self.inbox.append((part.tap.id, boot_id, first, last, low, high, len(at_us), arrival_us, zlib.crc32(packed), packed))
        self._touch(part.tap.id, at_us, low, high, arrival_us)
        state = self.boots[boot_id]
        state.first_at_us, state.last_at_us = min(state.first_at_us, low), max(state.last_at_us, high)
        heard = self.heard.get(part.tap.id, (arrival_us, high))
        self.heard[part.tap.id] = max(heard[0], arrival_us), max(heard[1], high)
        if len(self.bodies) > 1 or len(part.rows) > len(at_us):
            fill = np.full(len(at_us), boot_id, np.int64)
            readings = Readings(at_us, dict(zip(names, values, strict=True)), fill, sequence, own_at_us, fill, fill,
                                np.zeros(len(at_us), np.bool_), unknown)
            (state.pending if lot.is_numbered else self.pending_by_tap.setdefault(part.tap.id, [])).append(readings)

    def _touch(self, tap: int, at_us: IntArray, low: int, high: int, arrival_us: int) -> None:
        """Marks for the pipeline; readings far apart are marked apart, so that nobody works through the years between."""
        if high - low <= _TOUCH_GAP_US:
            self.touches.append((tap, low, high, arrival_us))
            return
        times = np.sort(at_us)
        edges = np.flatnonzero(np.diff(times) > 600_000_000)
        firsts, lasts = times[np.concatenate([[0], edges + 1])], times[np.concatenate([edges, [len(times) - 1]])]
        self.touches += [(tap, first, last, arrival_us) for first, last in zip(firsts.tolist(), lasts.tolist(), strict=True)]

    def _finish_part(self, body: Body, part: Part, boot_id: int, faults: dict[int, Fault], answer: Answer) -> None:
        """Set aside what could not be used, and say which numbers are acknowledged."""
        asides = part.aside
        if faults:
            asides = asides + [aside_of(part, int(part.rows[place]), body.boot, faults[place]) for place in sorted(faults)]
            asides.sort(key=lambda aside: aside.row)
        answer.aside += asides
        if not body.boot:
            return
        offered = _offered(body, part)
        if not offered:
            return
        answer.ranges[part.tap.name] = offered
        state = self.boots[boot_id]
        state.lowest = offered[0][0] if state.lowest is None else min(state.lowest, offered[0][0])
        numbers = [aside.sequence for aside in asides if aside.sequence is not None]
        if numbers:
            state.gained.append(np.array(numbers, np.int64))
            state.held += ranges_of(np.array(numbers, np.int64))

    def _write(self) -> None:
        """All rows but the set-aside ones, in one round trip."""
        with self.db.pipeline():
            cursor = psycopg.Cursor(self.db)
            if self.inbox:
                cursor.execute(_INSERT_INBOX, [list(column) for column in zip(*self.inbox, strict=True)])
                cursor.execute(_INSERT_TOUCH, [list(column) for column in zip(*self.touches, strict=True)])
                heard = sorted((tap, *times) for tap, times in self.heard.items())
                cursor.execute(_UPSERT_HEARD, [list(column) for column in zip(*heard, strict=True)])
            self._write_clocks(cursor)
            boots = [(row, multirange_text(_merged(state.gained)), state.first_at_us, state.last_at_us, state.lowest)
                     for row, state in self.boots.items()]
            updated = psycopg.Cursor(self.db)
            if boots:
                updated.execute(_UPDATE_BOOTS, [list(column) for column in zip(*boots, strict=True)])
        for row, number in updated.fetchall() if boots else ():
            self.boots[row].through = number

    def _write_clocks(self, cursor: psycopg.Cursor[Any]) -> None:
        last: dict[int, Body] = dict(zip(self.boot_of_body, self.bodies, strict=True))
        rows = [(row, state.is_server_timed, state.fault[:200], state.offset_us, state.uptime_zero_us, state.uptime_last_ms,
                 state.last_arrival_us, last[row].firmware, last[row].remote_address[:64]) for row, state in self.clocks.items()]
        cursor.execute(_UPDATE_CLOCKS, [list(column) for column in zip(*rows, strict=True)])

    def _write_asides(self, answers: list[Answer]) -> None:
        """Readings set aside, each listed once; and names of unknown columns."""
        rows = [(body.station.id, aside.tap_id, aside.boot, aside.sequence, body.sending.arrival_us, aside.field[:100],
                 aside.why[:300], aside.do[:300], aside.reading.decode(), aside.digest())
                for body, answer in zip(self.bodies, answers, strict=True) for aside in answer.aside]
        if rows:
            psycopg.Cursor(self.db).execute(_INSERT_ASIDE, [list(column) for column in zip(*rows, strict=True)])
        if self.new_names:
            taps, columns = zip(*sorted(self.new_names), strict=True)
            psycopg.Cursor(self.db).execute(_ADD_UNKNOWN, (list(taps), list(columns)))
            self.found_ids.unknown |= self.new_names

    def _add_through(self, body: Body, station_boot: int, answer: Answer) -> None:
        for part in body.parts:
            through = self.boots[self.tap_boots[part.tap.id, station_boot]].through
            if through is not None and part.tap.name in answer.ranges:
                answer.through[part.tap.name] = through


def note_refused(db: psycopg.Connection[Any], station_id: int, boot: str, lowest: dict[int, int], arrival_us: int) -> None:
    """Keep the smallest numbers of a refused body, so that ``through`` never reaches beyond them."""
    station_boot = station_boot_ids(db, [(station_id, boot)], arrival_us)[station_id, boot]
    ids = tap_boot_ids(db, [(tap, station_boot) for tap in lowest])
    rows = sorted((row, lowest[tap]) for (tap, _), row in ids.items())
    psycopg.Cursor(db).execute(
        "UPDATE ingest_tapboot SET lowest_sequence = least(lowest_sequence, low) "
        "FROM unnest(%s::bigint[], %s::bigint[]) AS row(boot, low) WHERE id = boot",
        [list(column) for column in zip(*rows, strict=True)])


def _has_unnumbered(body: Body, part: Part) -> bool:
    return bool(len(part.rows)) and (not body.boot or int(part.sequence.min()) == NO_SEQUENCE)


def _offered(body: Body, part: Part) -> Ranges:
    """Ranges of all numbers of a part, also of readings set aside; empty without boot id."""
    if not body.boot:
        return []
    sequence = part.sequence
    if len(sequence) and not part.aside_sequences:
        first, last = int(sequence[0]), int(sequence[-1])
        if first != NO_SEQUENCE and last - first == len(sequence) - 1 and bool((sequence[1:] > sequence[:-1]).all()):
            return [(first, last)]
    return ranges_of(np.concatenate([sequence[sequence != NO_SEQUENCE], np.array(part.aside_sequences, np.int64)]))


def _lots(body: Body, part: Part, at_us: IntArray, timed: Any, faults: dict[int, Fault]) -> list[Lot]:
    """A part's readings, cut by how they are timed and identified: mostly one lot."""
    count = len(part.rows)
    if not count:
        return []
    numbered = (part.sequence != NO_SEQUENCE) if body.boot else np.zeros(count, np.bool_)
    usable = np.ones(count, np.bool_)
    usable[list(faults)] = False
    lots = []
    for is_timed in (False, True):
        for is_numbered in (True, False):
            places = np.flatnonzero(usable & (timed == is_timed) & (numbered == is_numbered))
            if len(places):
                lots.append(Lot(part, places, at_us[places], is_timed, is_numbered))
    return lots


def _ranges_in(text: str) -> Ranges:
    """Closed ranges of PostgreSQL's text of a multirange, as in ``{[1,5),[7,9)}``."""
    if text == "{}":
        return []
    return [(int(low), int(high) - 1) for low, high in (pair.split(",") for pair in text[2:-2].split("),["))]


def _merged(gained: list[IntArray]) -> Ranges:
    return ranges_of(np.concatenate(gained)) if gained else []


_LAST_TIMES: LiteralString = "SELECT tap_id, last_at_us FROM ingest_tapheard WHERE tap_id = ANY(%s::bigint[])"
_BOOTLESS: LiteralString = """
    SELECT tap_id, kept.id FROM ingest_tapboot AS kept JOIN ingest_stationboot AS station ON station.id = station_boot_id
    WHERE tap_id = ANY(%s::bigint[]) AND station.boot = ''"""
_INSERT_INBOX: LiteralString = """
    INSERT INTO ingest_inboxrow (tap_id, tap_boot_id, first_sequence, last_sequence, first_at_us, last_at_us, count,
                                 arrival_us, crc, body)
    SELECT * FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[], %s::bigint[], %s::bigint[], %s::bigint[], %s::int[],
                         %s::bigint[], %s::bigint[], %s::bytea[])"""
_INSERT_TOUCH: LiteralString = """
    INSERT INTO ingest_touch (tap_id, first_at_us, last_at_us, arrival_us)
    SELECT * FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[], %s::bigint[])"""
_UPSERT_HEARD: LiteralString = """
    INSERT INTO ingest_tapheard AS kept (tap_id, last_arrival_us, last_at_us)
    SELECT * FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[])
    ON CONFLICT (tap_id) DO UPDATE SET last_arrival_us = greatest(kept.last_arrival_us, excluded.last_arrival_us),
                                       last_at_us = greatest(kept.last_at_us, excluded.last_at_us)"""
_UPDATE_CLOCKS: LiteralString = """
    UPDATE ingest_stationboot SET is_server_timed = timed, clock_fault = fault, clock_offset_us = offset_us,
           uptime_zero_us = zero_us, uptime_last_ms = uptime_ms, last_arrival_us = arrival_us,
           firmware = CASE WHEN row.firmware = '' THEN ingest_stationboot.firmware ELSE row.firmware END,
           remote_address = address
    FROM unnest(%s::bigint[], %s::bool[], %s::text[], %s::bigint[], %s::bigint[], %s::bigint[], %s::bigint[], %s::text[],
                %s::text[]) AS row(boot_id, timed, fault, offset_us, zero_us, uptime_ms, arrival_us, firmware, address)
    WHERE id = boot_id"""
_UPDATE_BOOTS: LiteralString = """
    UPDATE ingest_tapboot SET held = held + gained::int8multirange, first_at_us = least(first_at_us, low_us),
           last_at_us = greatest(last_at_us, high_us), lowest_sequence = least(lowest_sequence, lowest)
    FROM unnest(%s::bigint[], %s::text[], %s::bigint[], %s::bigint[], %s::bigint[])
         AS row(boot, gained, low_us, high_us, lowest)
    WHERE id = boot
    RETURNING id, CASE WHEN lower(held) <= lowest_sequence
                       THEN (SELECT upper(first) - 1 FROM unnest(held) AS first LIMIT 1) END"""
_INSERT_ASIDE: LiteralString = """
    INSERT INTO ingest_setaside (station_id, tap_id, boot, sequence, arrival_us, field, why, "do", reading, digest)
    SELECT station, tap, boot, sequence, arrival_us, field, why, what, reading::jsonb, digest
    FROM unnest(%s::bigint[], %s::bigint[], %s::text[], %s::bigint[], %s::bigint[], %s::text[], %s::text[], %s::text[],
                %s::text[], %s::bytea[])
         AS row(station, tap, boot, sequence, arrival_us, field, why, what, reading, digest)
    ON CONFLICT (station_id, digest) DO NOTHING"""
_ADD_UNKNOWN: LiteralString = """
    UPDATE ingest_tap SET unknown_columns = ARRAY(SELECT DISTINCT unnest(unknown_columns::text[] || names) ORDER BY 1 LIMIT 200)
    FROM (SELECT tap, array_agg(name) AS names FROM unnest(%s::bigint[], %s::text[]) AS row(tap, name) GROUP BY tap) AS row
    WHERE id = tap AND NOT unknown_columns::text[] @> names"""
