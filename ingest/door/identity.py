"""Which readings of a part are new, which are known, and which claim an identity that other values already have.

Identity is (tap, boot, sequence); without boot or sequence it is (tap, at). Where the station gave no time of its own
either, a reading is known if the same values stand near the same moment. The first reading of an identity stays.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import psycopg

from ingest.door.body import Part
from ingest.store.columns import NO_SEQUENCE, NO_TIME, BoolArray, IntArray, Readings, concatenate
from ingest.store.find import are_same, numbered_readings, readings_near

SERVER_TIMED_TOLERANCE_US = 60_000_000
Fault = tuple[str, str, str]
OTHER_VALUES: Fault = ("sequence", "this sequence of this boot is held with other values",
                       "count on without repeating, or send a new boot id at every power-up")
OTHER_AT: Fault = ("at", "a reading with this time is held with other values", "send boot and sequence with each reading")
WAS_ASIDE: Fault = ("sequence", "this sequence of this boot was set aside before", "give a corrected reading a new sequence")
AFTER_NOW: Fault = ("uptime_ms", "this uptime lies after now.uptime_ms", "send now.uptime_ms as it is when sending")


@dataclass(slots=True)
class Lot:
    """Readings of one part that are identified and timed in the same way."""

    part: Part
    places: IntArray
    """Places within the part's arrays, shape (N,)."""
    at_us: IntArray
    is_server_timed: bool
    is_numbered: bool

    def as_readings(self, chosen: IntArray, boot_id: int = 0) -> Readings:
        """The chosen ones in the form of stored readings; the uptime is kept as it came, arrival and sending are not set."""
        places = self.places[chosen]
        columns = {name: values[places] for name, values in zip(self.part.names, self.part.values, strict=True)}
        if self.part.uptime_ms is not None:
            uptime_ms = self.part.uptime_ms[places].astype(np.float64)
            uptime_ms[uptime_ms < 0] = np.nan
            columns["uptime_ms"] = uptime_ms
        zeros = np.zeros(len(places), np.int64)
        unknown = None if self.part.unknown is None else self.part.unknown[places]
        return Readings(self.at_us[chosen], columns, np.full(len(places), boot_id, np.int64), self.part.sequence[places],
                        self.part.own_at_us[places], zeros, zeros, np.zeros(len(places), np.bool_), unknown)


@dataclass(slots=True)
class Verdict:
    """What becomes of a lot: places within it."""

    new: IntArray
    known: int
    faulty: dict[int, Fault]


def judge_numbered(db: psycopg.Connection[Any], lot: Lot, tap_boot: int, held: list[tuple[int, int]],
                   pending: list[Callable[[], Readings]]) -> Verdict:
    """Readings with boot and sequence.

    Args:
        held: Closed ranges already held of those offered.
        pending: Readings of this boot that go into the same transaction.
    """
    sequence = lot.part.sequence[lot.places]
    order = np.arange(len(sequence))
    first_low, last_high = int(sequence.min()), int(sequence.max())
    is_rising = bool((np.diff(sequence) > 0).all())
    if is_rising and not any(low <= last_high and high >= first_low for low, high in held):
        return Verdict(order, 0, {})
    is_held = np.zeros(len(sequence), np.bool_)
    for low, high in held:
        is_held |= (sequence >= low) & (sequence <= high)
    _, firsts = np.unique(sequence, return_index=True)
    is_first = np.zeros(len(sequence), np.bool_)
    is_first[firsts] = True
    new = order[is_first & ~is_held]
    faulty: dict[int, Fault] = {}
    known = _known_twins(lot, order[~is_first & ~is_held], sequence, new, faulty)
    asked = order[is_held]
    if len(asked):
        stored = concatenate([numbered_readings(db, lot.part.tap.id, tap_boot, sequence[asked]),
                              *(make() for make in pending)])
        known += _compare(lot, asked, _index_of(stored.sequence, sequence[asked]), stored, faulty, OTHER_VALUES, WAS_ASIDE)
    return Verdict(new, known, faulty)


def judge_by_time(db: psycopg.Connection[Any], lot: Lot, last_at_us: int | None, bootless: set[int],
                  pending: list[Callable[[], Readings]]) -> Verdict:
    """Readings known by their time only.

    Args:
        last_at_us: Newest time that the tap holds, None where it holds nothing.
        bootless: TapBoot ids of this tap without boot id.
        pending: Readings of this tap that go into the same transaction.
    """
    keys = _time_keys(lot)
    seen: dict[tuple[int, int, int], int] = {}
    twins, firsts = [], []
    for place, key in enumerate(keys):
        if key is not None and seen.setdefault(key, place) != place:
            twins.append(place)
        else:
            firsts.append(place)
    faulty: dict[int, Fault] = {}
    known = 0
    for place in twins:
        if bool(_equal(lot, np.array([place]), lot.as_readings(np.array([seen[keys[place]]])))[0]):  # type: ignore[index]
            known += 1
        else:
            faulty[place] = OTHER_AT
    tolerance_us = SERVER_TIMED_TOLERANCE_US if lot.is_server_timed else 0
    if not pending and (last_at_us is None or int(lot.at_us.min()) - tolerance_us > last_at_us):
        return Verdict(np.array(firsts, np.int64), known, faulty)
    stored = concatenate([readings_near(db, lot.part.tap.id, lot.at_us, tolerance_us), *(make() for make in pending)])
    by_time = (stored.sequence == NO_SEQUENCE) | np.isin(stored.boot_id, list(bootless))
    stored = stored.pick(by_time)
    found = {key: place for place, key in reversed(list(enumerate(_stored_keys(stored))))}
    asked = np.array([place for place in firsts if keys[place] is not None and keys[place] in found], np.int64)
    index = np.array([found[keys[place]] for place in asked.tolist()], np.int64)  # type: ignore[index]
    is_near = np.abs(stored.at_us[index] - lot.at_us[asked]) <= tolerance_us
    asked, index = asked[is_near], index[is_near]
    weak: dict[int, Fault] = {}
    known += _compare(lot, asked, index, stored, weak, OTHER_AT, OTHER_AT)
    has_own = lot.part.own_at_us[lot.places] != NO_TIME
    faulty |= {place: fault for place, fault in weak.items() if has_own[place]}
    settled = set(asked.tolist()) - {place for place in weak if not has_own[place]}
    return Verdict(np.array([place for place in firsts if place not in settled], np.int64), known, faulty)


def _time_keys(lot: Lot) -> list[tuple[int, int, int] | None]:
    """(own stamp, uptime where there is no stamp, sequence); None where there is nothing to know a reading by."""
    own = lot.part.own_at_us[lot.places].tolist()
    uptime = lot.part.uptimes()[lot.places].tolist()
    sequence = lot.part.sequence[lot.places].tolist()
    return [(at, -1, number) if at != NO_TIME else ((NO_TIME, up, number) if up >= 0 or number >= 0 else None)
            for at, up, number in zip(own, uptime, sequence, strict=True)]


def _stored_keys(stored: Readings) -> list[tuple[int, int, int]]:
    uptime = np.nan_to_num(stored.column("uptime_ms"), nan=-1.0).astype(np.int64).tolist()
    return [(at, -1, number) if at != NO_TIME else (NO_TIME, up, number)
            for at, up, number in zip(stored.own_at_us.tolist(), uptime, stored.sequence.tolist(), strict=True)]


def _known_twins(lot: Lot, twins: IntArray, sequence: IntArray, new: IntArray, faulty: dict[int, Fault]) -> int:
    """A number that comes twice in one part: compare with its first."""
    if not len(twins):
        return 0
    firsts = new[_index_of(sequence[new], sequence[twins])]
    same = _equal(lot, twins, lot.as_readings(firsts))
    faulty |= dict.fromkeys(twins[~same].tolist(), OTHER_VALUES)
    return int(same.sum())


def _compare(lot: Lot, asked: IntArray, index: IntArray, stored: Readings, faulty: dict[int, Fault],
             other: Fault, absent: Fault) -> int:
    """Count the readings that equal the stored ones at ``index`` (-1: none); the others become faulty."""
    faulty |= dict.fromkeys(asked[index < 0].tolist(), absent)
    asked, index = asked[index >= 0], index[index >= 0]
    if not len(asked):
        return 0
    same = _equal(lot, asked, stored.pick(index))
    faulty |= dict.fromkeys(asked[~same].tolist(), other)
    return int(same.sum())


def _equal(lot: Lot, places: IntArray, stored: Readings) -> BoolArray:
    """Where the lot's readings equal the stored ones, stamps included."""
    return are_same(lot.as_readings(places), stored)


def _index_of(have: IntArray, wanted: IntArray) -> IntArray:
    """Place of each wanted number in ``have``, -1 where it is not there."""
    if not len(have):
        return np.full(len(wanted), -1, np.int64)
    order = np.argsort(have, kind="stable")
    place = np.minimum(np.searchsorted(have[order], wanted), len(have) - 1)
    return np.where(have[order][place] == wanted, order[place], -1)

