"""A decoded map to checked readings: the good ones as arrays, the others set aside one by one with reason and remedy.

What makes a whole body unusable is a Refusal (400, 403 or 413); nothing here raises anything else.
"""

from array import array
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from ingest.aside import Aside, reading_json
from ingest.clocks import LONGEST_UPTIME_MS, NO_UPTIME, Sending
from ingest.door.columns import Faults, integers_of, is_binary, numbers_of, stamps_of, words_of
from ingest.door.refusal import Refusal, bad_form, too_large
from ingest.door.vocabulary import Plan, plan_for
from ingest.stamps import parse_stamp, parse_stamps
from ingest.store.columns import NO_SEQUENCE, NO_TIME, FloatArray, IntArray, ObjectArray
from ingest.times import YEAR_1_US, YEAR_10000_US

LARGEST_BATCH = 100_000
MOST_UNKNOWN = 50
_PLAIN_NUMBERS = ({int}, {float}, {int, float})
_GREATEST_SEQUENCE = (1 << 63) - 2


@dataclass(frozen=True, slots=True)
class KnownTap:
    """A tap as the door knows it."""

    id: int
    name: str
    kind: str
    unit: str


@dataclass(frozen=True, slots=True)
class KnownStation:
    """A station as the door knows it."""

    id: int
    name: str
    taps: Mapping[str, KnownTap]


@dataclass(slots=True)
class Part:
    """One tap's readings of a body; arrays hold the usable ones, in the order sent."""

    tap: KnownTap
    sent: Mapping[str, Any]
    """The columns as they came."""
    count: int
    """Readings sent."""
    rows: IntArray | None
    """Places of the usable ones in the columns, shape (N,); None where all are usable."""
    names: tuple[str, ...]
    values: FloatArray
    """Shape (columns, N)."""
    sequence: IntArray
    steps_from: int | None
    """First number, where the usable ones are numbered without a hole and in order."""
    own_at_us: IntArray
    uptime_ms: IntArray | None
    """None where no reading has one."""
    unknown: ObjectArray | None
    unknown_names: tuple[str, ...]
    aside: list[Aside]
    aside_sequences: list[int]

    def __len__(self) -> int:
        """Usable readings."""
        return len(self.own_at_us)

    def uptimes(self) -> IntArray:
        """Uptimes as sent, NO_UPTIME where none, shape (N,)."""
        return np.full(len(self), NO_UPTIME, np.int64) if self.uptime_ms is None else self.uptime_ms


@dataclass(slots=True)
class Body:
    """One checked body."""

    station: KnownStation
    boot: str
    firmware: str
    sending: Sending
    parts: list[Part]
    own_at_us: IntArray
    """Stamps of the usable readings of all parts, one after the other."""
    count: int
    """Readings sent."""
    remote_address: str = ""


class UnknownTap(Refusal):
    """The station has no such tap (or the door has not heard of it yet)."""


@dataclass(slots=True)
class _Draft:
    """A part on its way: the texts of all taps' stamps are parsed in one go."""

    tap: KnownTap
    sent: Mapping[str, Any]
    plan: Plan
    count: int
    values: FloatArray
    sequence: IntArray
    steps_from: int | None
    uptime_ms: IntArray | None
    own_at_us: IntArray | None
    faults: Faults = field(default_factory=dict)


def check_body(found: Mapping[str, Any], station: KnownStation, arrival_us: int, remote_address: str = "") -> Body:
    """The readings of a decoded map.

    Raises:
        Refusal: The body cannot be taken as a whole.
    """
    named = found.get("station")
    if named is not None and named != station.name:
        raise Refusal(403, f"this key belongs to station {station.name!r}",
                      "Use the key of the station that the body names, or leave the name out.", "station")
    boot, firmware = _text(found, "boot", 100), _text(found, "firmware", 200, is_cut=True)
    now_at_us, now_uptime_ms = _now(found.get("now"))
    taps = found.get("taps")
    if not isinstance(taps, dict):
        raise bad_form("taps is missing or no map", "Send taps: a map from tap name to columns; see docs/payload.md.", "taps")
    texts: list[str] = []
    drafts: list[_Draft] = []
    total = 0
    for name, sent in taps.items():
        tap = station.taps.get(name) if isinstance(name, str) else None
        if tap is None:
            raise UnknownTap(400, f"station {station.name!r} has no tap {str(name)[:80]!r}",
                             "Check the name, or add the tap on the station's page or with manage.py add_station.",
                             f"taps.{str(name)[:80]}")
        draft = _draft(tap, sent, texts)
        total += draft.count
        if total > LARGEST_BATCH:
            raise too_large(f"the body has more than {LARGEST_BATCH:,} readings", "Send half as many at a time.")
        drafts.append(draft)
    _give_stamps(drafts, texts)
    parts = [_part(draft, boot, now_uptime_ms) for draft in drafts]
    own_at_us = np.concatenate([part.own_at_us for part in parts]) if parts else np.empty(0, np.int64)
    sending = Sending(arrival_us, now_at_us, now_uptime_ms, bool(boot), _oldest(own_at_us))
    return Body(station, boot, firmware, sending, parts, own_at_us, total, remote_address)


def _oldest(own_at_us: IntArray) -> int | None:
    """The earliest stamp, None where there is none."""
    if not len(own_at_us):
        return None
    oldest_us = int(own_at_us.min())
    if oldest_us == NO_TIME:
        oldest_us = int(own_at_us[own_at_us != NO_TIME].min(initial=YEAR_10000_US))
    return None if oldest_us == YEAR_10000_US else oldest_us


def lowest_sequences(found: Mapping[str, Any], station: KnownStation) -> tuple[str, dict[int, int]]:
    """Boot and each tap's smallest sequence of a body that was refused, as far as they can be read.

    A station must never delete what was refused: these numbers hold back ``through``.
    """
    boot, taps = found.get("boot"), found.get("taps")
    lowest: dict[int, int] = {}
    if isinstance(boot, str) and 0 < len(boot) <= 100 and boot.isprintable() and isinstance(taps, dict):
        for name, sent in taps.items():
            column = sent.get("sequence") if isinstance(sent, dict) and isinstance(name, str) else None
            tap = station.taps.get(name) if isinstance(name, str) else None
            numbers = [number for number in (column if isinstance(column, list) else ())
                       if type(number) is int and 0 <= number <= _GREATEST_SEQUENCE]
            if tap and numbers:
                lowest[tap.id] = min(numbers)
    return boot if isinstance(boot, str) else "", lowest


def aside_of(part: Part, row: int, boot: str, fault: tuple[str, str, str]) -> Aside:
    """One reading of a part, set aside for (field, why, do)."""
    reading = {name: _element(column, row, name, part.tap.unit) for name, column in part.sent.items()}
    sequence = reading.get("sequence")
    is_number = type(sequence) is int and 0 <= sequence <= _GREATEST_SEQUENCE
    return Aside(part.tap.id, part.tap.name, row, *fault, boot, sequence if is_number else None, reading_json(reading))


def _text(found: Mapping[str, Any], name: str, longest: int, *, is_cut: bool = False) -> str:
    text = found.get(name)
    if text is None:
        return ""
    if not isinstance(text, str) or (len(text) > longest and not is_cut) or not text.isprintable():
        raise bad_form(f"{name} is not a text of at most {longest} printable letters",
                       f"Send {name} as short text or leave it out.", name)
    return text[:longest]


def _now(now: Any) -> tuple[int | None, int | None]:
    """The station's clock and uptime at the moment of sending."""
    if now is None:
        return None, None
    if not isinstance(now, dict):
        raise bad_form("now is no map", 'Send now as {"at": …, "uptime_ms": …} or leave it out.', "now")
    at, uptime_ms = now.get("at"), now.get("uptime_ms")
    at_us = parse_stamp(at) if isinstance(at, str) else at
    if at is not None and (type(at_us) is not int or not YEAR_1_US <= at_us < YEAR_10000_US):
        raise bad_form("now.at is no time", "Send RFC 3339 with a zone, whole microseconds since 1970, or null.", "now.at")
    if uptime_ms is not None and (type(uptime_ms) not in (int, float) or not 0 <= uptime_ms <= LONGEST_UPTIME_MS):
        raise bad_form("now.uptime_ms is no uptime", "Send milliseconds since power-up, or null.", "now.uptime_ms")
    return at_us, None if uptime_ms is None else int(uptime_ms)


def _draft(tap: KnownTap, sent: Any, texts: list[str]) -> _Draft:
    """Columns of one tap as arrays; stamps that are text are added to ``texts`` to be parsed later."""
    place = f"taps.{tap.name}"
    if not isinstance(sent, dict) or not all(isinstance(name, str) for name in sent):
        raise bad_form(f"tap {tap.name!r} has no columns", "Send a map from column name to a list of values.", place)
    count = _common_length(tap.name, sent)
    plan = plan_for(tap.kind, tap.unit, tuple(sent))
    if plan.missing:
        raise bad_form(f"tap {tap.name!r}: {plan.missing}",
                       "Send the raw value of each reading in columns of equal length.", place)
    _check_unknown(plan, place)
    faults: Faults = {}
    sequence, steps_from = _sequence(sent.get("sequence"), count, faults)
    uptime_ms = None
    if sent.get("uptime_ms") is not None:
        uptime_ms = integers_of(sent["uptime_ms"], "uptime_ms", count, NO_UPTIME, LONGEST_UPTIME_MS, faults)
    column = sent.get("at")
    own_at_us: IntArray | None = None
    if type(column) is list and count and set(map(type, column)) == {str}:
        texts += column
    else:
        own_at_us = stamps_of(column, count, faults)
    values = _plain_values(sent, plan, count)
    if values is None:
        values = numbers_of(sent, plan, count, tap.kind, tap.unit, faults)
    return _Draft(tap, sent, plan, count, values, sequence, steps_from, uptime_ms, own_at_us, faults)


def _common_length(tap: str, sent: Mapping[str, Any]) -> int:
    """Length that all columns have."""
    lengths = set()
    for name, column in sent.items():
        if type(column) is list:
            lengths.add(len(column))
        elif isinstance(column, bytes) and len(column) % 8 == 0:
            lengths.add(len(column) // 8)
        else:
            what = "a binary string of another length than 8 bytes a value" if isinstance(column, bytes) else "no list"
            raise bad_form(f"tap {tap!r}: {name[:80]!r} is {what}", "Send a list with one value per reading.",
                           f"taps.{tap}.{name[:80]}")
    if len(lengths) == 1:
        return lengths.pop()
    if not lengths:
        return 0
    counts = {name: len(column) // (1 if type(column) is list else 8) for name, column in sent.items()}
    usual = Counter(counts.values()).most_common(1)[0][0]
    odd, length = next((name, length) for name, length in counts.items() if length != usual)
    raise bad_form(f"tap {tap!r}: {odd[:80]!r} has {length} values, other columns {usual}",
                   "Send one value per reading in every column; null where there is none.", f"taps.{tap}.{odd[:80]}")


def _check_unknown(plan: Plan, place: str) -> None:
    if len(plan.unknown) > MOST_UNKNOWN:
        raise bad_form(f"{len(plan.unknown)} unknown columns",
                       f"Send at most {MOST_UNKNOWN} columns beyond the known ones.", place)
    for name in plan.unknown:
        if not 0 < len(name) <= 100 or not name.isprintable():
            raise bad_form("a column's name is empty, too long or not printable", "Use at most 100 printable letters.", place)


def _sequence(column: Any, count: int, faults: Faults) -> tuple[IntArray, int | None]:
    """Numbers of the readings, NO_SEQUENCE where none, and the first where they count up one by one."""
    if column is None or not count:
        return np.full(count, NO_SEQUENCE, np.int64), None
    if type(column) is list and type(column[0]) is int and set(map(type, column)) == {int}:
        first = column[0]
        if 0 <= first <= _GREATEST_SEQUENCE - count and column == list(range(first, first + count)):
            return np.arange(first, first + count), first
    numbers = integers_of(column, "sequence", count, NO_SEQUENCE, _GREATEST_SEQUENCE, faults)
    first, last = int(numbers[0]), int(numbers[-1])
    is_even = not faults and first >= 0 and last - first == count - 1 and bool((numbers[1:] > numbers[:-1]).all())
    return numbers, first if is_even else None


def _plain_values(sent: Mapping[str, Any], plan: Plan, count: int) -> FloatArray | None:
    """All values at once where they are plain numbers in range, shape (columns, N); None where one has to be looked at."""
    columns = [sent[name] for name in plan.values]
    if not columns or not count:
        return None
    if all(map(is_binary, columns)) and not plan.has_whole:
        values = np.frombuffer(b"".join(columns), np.float64).reshape(len(columns), count)
    else:
        flat: list[Any] = []
        for name, column in zip(plan.values, columns, strict=True):
            if type(column) is not list:
                return None
            flat += map(int, column) if name == "clipped" and set(map(type, column)) == {bool} else column
        if set(map(type, flat)) not in _PLAIN_NUMBERS:
            return None
        try:
            values = np.frombuffer(array("d", flat), np.float64).reshape(len(columns), count)
        except OverflowError:
            return None
    if plan.low_for_all <= values.min() and values.max() <= plan.high_for_all:
        return values
    return values if bool(((values >= plan.low) & (values <= plan.high)).all()) else None


def _give_stamps(drafts: list[_Draft], texts: list[str]) -> None:
    """Parse the stamps of all taps together and hand them out."""
    stamps, place = parse_stamps(texts), 0
    for draft in drafts:
        if draft.own_at_us is None:
            draft.own_at_us = stamps[place:place + draft.count]
            for row in np.flatnonzero(draft.own_at_us == NO_TIME).tolist():
                draft.faults.setdefault(row, ("at", f"{texts[place + row][:80]!r} is no time",
                                              "send RFC 3339 with a zone, as in 2031-03-04T02:11:05.120Z"))
            place += draft.count


def _part(draft: _Draft, boot: str, now_uptime_ms: int | None) -> Part:
    """Usable and unusable readings apart."""
    faults = draft.faults
    assert draft.own_at_us is not None
    part = Part(draft.tap, draft.sent, draft.count, None, draft.plan.values, draft.values, draft.sequence, draft.steps_from,
                draft.own_at_us, draft.uptime_ms, None, draft.plan.unknown, [], [])
    if faults:
        part.aside = [aside_of(part, row, boot, faults[row]) for row in sorted(faults)]
        part.aside_sequences = [aside.sequence for aside in part.aside if aside.sequence is not None]
        good = np.ones(draft.count, np.bool_)
        good[list(faults)] = False
        part.rows, part.values = np.flatnonzero(good), np.ascontiguousarray(draft.values[:, good])
        part.sequence, part.own_at_us, part.steps_from = draft.sequence[good], draft.own_at_us[good], None
        part.uptime_ms = None if draft.uptime_ms is None else draft.uptime_ms[good]
    _check_times(part, now_uptime_ms)
    if draft.plan.unknown:
        part.unknown = _unknown(part)
    return part


def _check_times(part: Part, now_uptime_ms: int | None) -> None:
    """Enough is known to place each reading."""
    if not len(part) or int(part.own_at_us.min()) != NO_TIME:
        return
    has_none, uptime_ms = part.own_at_us == NO_TIME, part.uptimes()
    if now_uptime_ms is None and bool((has_none & (uptime_ms != NO_UPTIME)).any()):
        raise bad_form(f"tap {part.tap.name!r} has readings without at, and now.uptime_ms is missing",
                       "Send now.uptime_ms with every attempt, or at with every reading.", "now.uptime_ms")
    nameless = has_none & (uptime_ms == NO_UPTIME) & (part.sequence == NO_SEQUENCE)
    if int(nameless.sum()) > 1:
        raise bad_form(f"tap {part.tap.name!r} has several readings without at, uptime_ms and sequence",
                       "Give each reading at, uptime_ms or sequence, or send one reading at a time.", f"taps.{part.tap.name}.at")


def _unknown(part: Part) -> ObjectArray:
    """Columns nobody knows, as one JSON map of text per usable reading."""
    made = np.empty(len(part), object)
    for number, row in enumerate(range(part.count) if part.rows is None else part.rows.tolist()):
        values = {name: _element(part.sent[name], row, name, part.tap.unit) for name in part.unknown_names}
        made[number] = reading_json(values).decode()
    return made


def _element(column: Any, row: int, name: str, unit: str) -> Any:
    """One value as it came; of a binary column the number."""
    if not isinstance(column, bytes):
        return column[row]
    return words_of(column, name, unit)[row].item()


