"""Decides, within one transaction, what becomes of each reading: new, known or set aside; and where it lies in time.

Locks are taken in one order everywhere (station boots, taps, tap boots, each sorted by id), so that any number of doors
may commit at once. With ``ingest.door.rows`` the only writer of inbox rows, held ranges and clock states.
"""

import zlib
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import psycopg

from ingest.aside import Aside
from ingest.clocks import ClockState, Placed, observe, place
from ingest.door.body import Body, Part
from ingest.door.client import PREFIX
from ingest.door.identity import AFTER_NOW, Fault, Lot, judge_by_time, judge_numbered
from ingest.door.rows import Harvest, Ranges, lock_boots, lock_clocks, lock_taps, touches_of, write_harvest
from ingest.store.boots import StationBootKey, TapBootKey, multirange_text, ranges_of, station_boot_ids, tap_boot_ids
from ingest.store.codec import Batch, pack_batch, pack_even_batch
from ingest.store.columns import NO_SEQUENCE, IntArray, Readings

_NO_FIRST_US, _NO_LAST_US = (1 << 63) - 1, -(1 << 63)


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
        for kept, found in ((self.station_boots, other.station_boots), (self.tap_boots, other.tap_boots),
                            (self.unknown, other.unknown)):
            if len(kept) > 100_000:
                kept.clear()
            kept |= found  # type: ignore[operator]


@dataclass(slots=True)
class Answer:
    """What became of one body."""

    boot: str
    stored: int = 0
    known: int = 0
    disordered: int = 0
    """New readings that came behind one with a higher number of their boot."""
    aside: list[Aside] = field(default_factory=list)
    ranges: dict[str, Ranges] = field(default_factory=dict)
    """By tap: numbers of this body that are acknowledged."""
    through: dict[str, int] = field(default_factory=dict)
    """By tap: end of the unbroken range held since the boot's first number."""


@dataclass(slots=True)
class _BootState:
    """A tap's boot within this transaction."""

    held: Ranges
    above: int = 0
    """The number behind the highest held."""
    gained: Ranges = field(default_factory=list)
    pending: list[Callable[[], Readings]] = field(default_factory=list)
    first_at_us: int = _NO_FIRST_US
    last_at_us: int = _NO_LAST_US
    lowest: int | None = None

    def gain(self, ranges: Ranges) -> None:
        """These numbers are held from now on."""
        self.gained += ranges
        self.held += ranges


class Transaction:
    """One commit of some bodies; ``run`` once, within the caller's transaction."""

    def __init__(self, db: psycopg.Connection[Any], bodies: Sequence[Body], known_ids: Ids) -> None:
        self.db, self.bodies, self.known_ids, self.found_ids = db, bodies, known_ids, Ids()
        self.station_boots: list[int] = []
        self.tap_boots: dict[TapBootKey, int] = {}
        self.clocks: dict[int, ClockState] = {}
        self.boots: dict[int, _BootState] = {}
        self.last_at_us: dict[int, int] = {}
        self.bootless: dict[int, set[int]] = {}
        self.pending_by_tap: dict[int, list[Callable[[], Readings]]] = {}
        self.harvest = Harvest()

    def run(self) -> list[Answer]:
        """Store the bodies and answer each.

        Raises:
            StaleIds: Start again with empty ids.
        """
        self._find_ids()
        self._lock()
        answers = [self._take(body, boot) for body, boot in zip(self.bodies, self.station_boots, strict=True)]
        through = self._write(answers)
        for body, boot, answer in zip(self.bodies, self.station_boots, answers, strict=True):
            for part in body.parts:
                number = through.get(self.tap_boots[part.tap.id, boot])
                if number is not None and part.tap.name in answer.ranges:
                    answer.through[part.tap.name] = number
        return answers

    def _find_ids(self) -> None:
        """Row ids of all boots, made where missing."""
        wanted = {(body.station.id, body.boot) for body in self.bodies}
        kept = self.known_ids.station_boots
        if missing := wanted - kept.keys():
            self.found_ids.station_boots = station_boot_ids(self.db, missing, self.bodies[0].sending.arrival_us)
        found = self.found_ids.station_boots
        self.station_boots = [found.get(key) or kept[key] for key in ((body.station.id, body.boot) for body in self.bodies)]
        taps = {(part.tap.id, boot) for body, boot in zip(self.bodies, self.station_boots, strict=True) for part in body.parts}
        if absent := taps - self.known_ids.tap_boots.keys():
            self.found_ids.tap_boots = tap_boot_ids(self.db, absent)
        self.tap_boots = {key: self.found_ids.tap_boots.get(key) or self.known_ids.tap_boots[key] for key in taps}

    def _lock(self) -> None:
        """Lock and read what this transaction decides by."""
        self.clocks = lock_clocks(self.db, set(self.station_boots))
        unknown = {(part.tap.id, name) for body in self.bodies for part in body.parts for name in part.unknown_names
                   if len(part) and not name.startswith(PREFIX)}
        self.harvest.unknown = unknown - self.known_ids.unknown
        self.found_ids.unknown = self.harvest.unknown
        by_time = {part.tap.id for body in self.bodies for part in body.parts if _has_unnumbered(body, part)}
        if taps := sorted(by_time | {tap for tap, _ in self.harvest.unknown}):
            self.last_at_us, self.bootless = lock_taps(self.db, taps)
        offered: dict[int, Ranges] = {}
        for body, boot in zip(self.bodies, self.station_boots, strict=True):
            for part in body.parts:
                offered.setdefault(self.tap_boots[part.tap.id, boot], []).extend(_offered(body, part))
        self.boots = {row: _BootState(held, above) for row, (held, above) in lock_boots(self.db, offered).items()}
        if len(self.clocks) < len(set(self.station_boots)) or len(self.boots) < len(offered):
            raise StaleIds

    def _take(self, body: Body, station_boot: int) -> Answer:
        """Decide about one body."""
        state = self.clocks[station_boot] = observe(self.clocks[station_boot], body.sending)
        answer, start = Answer(body.boot), 0
        is_plain = not state.is_server_timed and body.is_stamped
        placed = None if is_plain else place(state, body.sending, body.own_at_us, _uptimes(body))
        for part in body.parts:
            boot_id = self.tap_boots[part.tap.id, station_boot]
            faults: dict[int, Fault] = {}
            if placed is not None or not self._take_even(body, part, boot_id, answer):
                where = slice(start, start + len(part))
                faults = self._take_odd(body, part, boot_id, placed or _as_stamped(body), where, answer)
            self._finish_part(body, part, boot_id, faults, answer)
            start += len(part)
        return answer

    def _take_even(self, body: Body, part: Part, boot_id: int, answer: Answer) -> bool:
        """The usual part in few steps: numbered without a hole, stamped by a good clock, all new. False where it is not."""
        first, state = part.steps_from, self.boots[boot_id]
        if first is None or not body.boot or part.unknown is not None or part.uptime_ms is not None:
            return False
        last = first + len(part) - 1
        if any(low <= last and high >= first for low, high in state.held):
            return False
        sent_us = body.sending.now_at_us or body.sending.arrival_us
        packed = pack_even_batch(part.own_at_us, part.names, part.values, first, sent_us)
        self._add_inbox(body, part.tap.id, boot_id, (first, last), part.own_at_us, packed)
        state.gain([(first, last)])
        answer.disordered += max(0, min(last + 1, state.above) - first)
        state.above = max(state.above, last + 1)
        if len(self.bodies) > 1:
            lot = Lot(part, np.arange(len(part)), part.own_at_us, False, True)
            state.pending.append(lambda: lot.as_readings(lot.places, boot_id))
        answer.stored += len(part)
        return True

    def _take_odd(self, body: Body, part: Part, boot_id: int, placed: Placed, where: slice, answer: Answer) -> dict[int, Fault]:
        """Any part; gives the faults by place among the usable readings."""
        impossible = np.flatnonzero(placed.is_impossible[where])
        faults: dict[int, Fault] = dict.fromkeys(impossible.tolist(), AFTER_NOW)
        for lot in _lots(body, part, placed.at_us[where], placed.is_server_timed[where], impossible):
            sent_us = placed.sent_server_us if lot.is_server_timed else placed.sent_own_us
            self._take_lot(body, lot, boot_id, sent_us, answer, faults)
        return faults

    def _take_lot(self, body: Body, lot: Lot, boot_id: int, sent_us: int, answer: Answer, faults: dict[int, Fault]) -> None:
        """New readings of a lot to the inbox; the others counted or put among the faults."""
        state, tap = self.boots[boot_id], lot.part.tap.id
        pending = state.pending if lot.is_numbered else self.pending_by_tap.setdefault(tap, [])
        if lot.is_numbered:
            verdict = judge_numbered(self.db, lot, boot_id, state.held, pending)
        else:
            verdict = judge_by_time(self.db, lot, self.last_at_us.get(tap), self.bootless.get(tap, set()), pending)
        answer.known += verdict.known
        answer.stored += len(verdict.new)
        faults |= {int(lot.places[place]): fault for place, fault in verdict.faulty.items()}
        if not len(verdict.new):
            return
        new = verdict.new
        stored = lot.as_readings(new, boot_id)
        pending.append(lambda: stored)
        values = np.ascontiguousarray([stored.columns[name] for name in stored.columns])
        packed = pack_batch(Batch(stored.at_us, tuple(stored.columns), values, stored.sequence, stored.own_at_us, sent_us,
                                  lot.is_server_timed, stored.unknown))
        span = (int(stored.sequence.min()), int(stored.sequence.max())) if lot.is_numbered else (None, None)
        self._add_inbox(body, tap, boot_id, span, stored.at_us, packed)
        if lot.is_numbered:
            state.gain(ranges_of(stored.sequence))
            highest = np.maximum.accumulate(np.concatenate([[state.above - 1], stored.sequence]))
            answer.disordered += int((stored.sequence < highest[:-1]).sum())
            state.above = int(highest[-1]) + 1

    def _add_inbox(self, body: Body, tap: int, boot_id: int, numbers: tuple[int | None, int | None], at_us: IntArray,
                   packed: bytes) -> None:
        """One inbox row, with its mark for the pipeline."""
        arrival_us, times_us = body.sending.arrival_us, sorted(at_us.tolist())
        low_us, high_us = times_us[0], times_us[-1]
        crc = zlib.crc32(packed)
        self.harvest.inbox.append((tap, boot_id, *numbers, low_us, high_us, len(times_us), arrival_us, crc, packed))
        self.harvest.touches += touches_of(tap, times_us, arrival_us)
        state = self.boots[boot_id]
        state.first_at_us, state.last_at_us = min(state.first_at_us, low_us), max(state.last_at_us, high_us)
        heard = self.harvest.heard.get(tap, (arrival_us, high_us))
        self.harvest.heard[tap] = max(heard[0], arrival_us), max(heard[1], high_us)

    def _finish_part(self, body: Body, part: Part, boot_id: int, faults: dict[int, Fault], answer: Answer) -> None:
        """Set aside what could not be used, and say which numbers are acknowledged."""
        asides = part.aside
        if faults:
            rows = {place: place if part.rows is None else int(part.rows[place]) for place in faults}
            asides = asides + [part.aside_of(rows[place], body.boot, fault) for place, fault in faults.items()]
            asides.sort(key=lambda aside: aside.row)
        answer.aside += asides
        offered = _offered(body, part)
        if not offered:
            return
        answer.ranges[part.tap.name] = offered
        state = self.boots[boot_id]
        state.lowest = offered[0][0] if state.lowest is None else min(state.lowest, offered[0][0])
        if numbers := [aside.sequence for aside in asides if aside.sequence is not None]:
            state.gain(ranges_of(np.array(numbers, np.int64)))

    def _write(self, answers: list[Answer]) -> dict[int, int | None]:
        """Everything to the database; gives ``through`` by TapBoot id."""
        last = dict(zip(self.station_boots, self.bodies, strict=True))
        harvest = self.harvest
        harvest.clocks = [
            (row, state.is_server_timed, state.fault[:200], state.offset_us, state.uptime_zero_us, state.uptime_last_ms,
             state.last_arrival_us, last[row].firmware, last[row].remote_address[:64]) for row, state in self.clocks.items()]
        harvest.boots = [(row, multirange_text(state.gained), state.first_at_us, state.last_at_us, state.lowest)
                         for row, state in self.boots.items()]
        harvest.asides = [
            (body.station.id, aside.tap_id, aside.boot, aside.sequence, body.sending.arrival_us, aside.field[:100],
             aside.why[:300], aside.do[:300], aside.reading.decode(), aside.digest())
            for body, answer in zip(self.bodies, answers, strict=True) for aside in answer.aside]
        return write_harvest(self.db, harvest)


def _has_unnumbered(body: Body, part: Part) -> bool:
    """Some readings are known by their time only."""
    return bool(len(part)) and (not body.boot or (part.steps_from is None and int(part.sequence.min()) == NO_SEQUENCE))


def _offered(body: Body, part: Part) -> Ranges:
    """Ranges of all numbers of a part, also of readings set aside; empty without boot id."""
    if not body.boot:
        return []
    if part.steps_from is not None:
        return [(part.steps_from, part.steps_from + len(part) - 1)]
    sequence = part.sequence
    return ranges_of(np.concatenate([sequence[sequence != NO_SEQUENCE], np.array(part.aside_sequences, np.int64)]))


def _uptimes(body: Body) -> IntArray:
    return np.concatenate([part.uptimes() for part in body.parts]) if body.parts else np.empty(0, np.int64)


def _as_stamped(body: Body) -> Placed:
    """All readings where the station's own stamps have them."""
    nowhere = np.zeros(len(body.own_at_us), np.bool_)
    arrival_us = body.sending.arrival_us
    return Placed(body.own_at_us, nowhere, nowhere, body.sending.now_at_us or arrival_us, arrival_us)


def _lots(body: Body, part: Part, at_us: IntArray, timed: Any, impossible: IntArray) -> list[Lot]:
    """A part's readings, cut by how they are timed and identified: mostly one lot."""
    numbered = (part.sequence != NO_SEQUENCE) if body.boot else np.zeros(len(part), np.bool_)
    usable = np.ones(len(part), np.bool_)
    usable[impossible] = False
    lots = []
    for is_timed in (False, True):
        for is_numbered in (True, False):
            places = np.flatnonzero(usable & (timed == is_timed) & (numbered == is_numbered))
            if len(places):
                lots.append(Lot(part, places, at_us[places], is_timed, is_numbered))
    return lots


