"""The columns of each tap as arrays, usable and unusable readings apart.

Usual columns (plain numbers in range, stamps as text of one form) are read for all taps of a body at once; anything else
is looked at value by value (``ingest.door.columns``). Both ways give the same arrays.
"""

from array import array
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from ingest.aside import reading_json
from ingest.clocks import LONGEST_UPTIME_MS, NO_UPTIME
from ingest.door.body import GREATEST_SEQUENCE, KnownTap, Part
from ingest.door.columns import Faults, integers_of, is_binary, numbers_of, stamps_of
from ingest.door.refusal import bad_form
from ingest.door.vocabulary import Plan, plan_for
from ingest.stamps import parse_stamps
from ingest.store.columns import NO_SEQUENCE, NO_TIME, FloatArray, IntArray, ObjectArray

MOST_UNKNOWN = 50
_PLAIN_NUMBERS = ({int}, {float}, {int, float})


@dataclass(slots=True)
class Draft:
    """A part on its way."""

    tap: KnownTap
    sent: Mapping[str, Any]
    plan: Plan
    count: int
    numbers: IntArray | None
    steps_from: int | None
    uptime_ms: IntArray | None
    own_at_us: IntArray | None
    """None while the stamps wait as text."""
    values: FloatArray | None = None
    faults: Faults = field(default_factory=dict)


def draft_of(tap: KnownTap, sent: Any, texts: list[str]) -> Draft:
    """One tap's columns, checked for their form; stamps that are text are added to ``texts`` to be parsed together.

    Raises:
        Refusal: The columns are not of the form.
    """
    if type(sent) is not dict:
        raise bad_form(f"tap {tap.name!r} has no columns", "Send a map from column name to a list of values.", f"taps.{tap.name}")
    plan = plan_for(tap.kind, tap.unit, tuple(sent))
    count = _common_length(tap.name, sent)
    if plan.missing:
        raise bad_form(f"tap {tap.name!r}: {plan.missing}",
                       "Send the raw value of each reading in columns of equal length.", f"taps.{tap.name}")
    if plan.unknown:
        _check_unknown(plan, f"taps.{tap.name}")
    faults: Faults = {}
    numbers, steps_from = _sequence(sent.get("sequence"), count, faults)
    uptime_ms = None
    if sent.get("uptime_ms") is not None:
        uptime_ms = integers_of(sent["uptime_ms"], "uptime_ms", count, NO_UPTIME, LONGEST_UPTIME_MS, faults)
    column = sent.get("at")
    own_at_us = None
    if type(column) is list and count and set(map(type, column)) == {str}:
        texts += column
    else:
        own_at_us = stamps_of(column, count, faults)
    return Draft(tap, sent, plan, count, numbers, steps_from, uptime_ms, own_at_us, faults=faults)


def give_stamps(drafts: list[Draft], texts: list[str]) -> None:
    """Parse the stamps of all taps together and hand them out."""
    stamps, place = parse_stamps(texts), 0
    is_good = not len(stamps) or int(stamps.min()) != NO_TIME
    for draft in drafts:
        if draft.own_at_us is None:
            draft.own_at_us = stamps[place:place + draft.count]
            if not is_good:
                for row in np.flatnonzero(draft.own_at_us == NO_TIME).tolist():
                    draft.faults.setdefault(row, ("at", f"{texts[place + row][:80]!r} is no time",
                                                  "send RFC 3339 with a zone, as in 2031-03-04T02:11:05.120Z"))
            place += draft.count


def give_values(drafts: list[Draft]) -> None:
    """Read the numbers of all taps together where they are plain and in range; else look at each."""
    if not _give_plain_values(drafts):
        for draft in drafts:
            if not (draft.count and _give_plain_values([draft])):
                draft.values = numbers_of(draft.sent, draft.plan, draft.count, draft.tap.kind, draft.tap.unit, draft.faults)
    for draft in drafts:
        if draft.tap.is_float32:
            draft.values = _as_declared(draft)


def _as_declared(draft: Draft) -> FloatArray:
    """The float32 that the source had: what it wrote in decimal figures is read as the number it wrote them of."""
    assert draft.values is not None
    values = draft.values.astype(np.float32).astype(np.float64)
    for place, name in enumerate(draft.plan.values):
        if name == "averaged":  # a count
            values[place] = draft.values[place]
    return values


def part_of(draft: Draft, boot: str) -> Part:
    """Usable and unusable readings apart."""
    faults = draft.faults
    assert draft.own_at_us is not None and draft.values is not None
    part = Part(draft.tap, draft.sent, draft.count, None, draft.plan.values, draft.values, draft.numbers, draft.steps_from,
                draft.own_at_us, draft.uptime_ms, None, draft.plan.unknown, [], [])
    if faults:
        part.aside = [part.aside_of(row, boot, faults[row]) for row in sorted(faults)]
        part.aside_sequences = [aside.sequence for aside in part.aside if aside.sequence is not None]
        good = np.ones(draft.count, np.bool_)
        good[list(faults)] = False
        part.numbers, part.steps_from = part.sequence[good], None
        part.rows, part.values = np.flatnonzero(good), np.ascontiguousarray(draft.values[:, good])
        part.own_at_us = draft.own_at_us[good]
        part.uptime_ms = None if draft.uptime_ms is None else draft.uptime_ms[good]
    if draft.plan.unknown:
        part.unknown = _unknown(part)
    return part


def _give_plain_values(drafts: list[Draft]) -> bool:
    """All values of these parts at once; False where one is not a plain number in range."""
    flat: list[Any] = []
    binary: list[bytes] = []
    for draft in drafts:
        plan, sent = draft.plan, draft.sent
        for name in plan.values:
            column = sent[name]
            if type(column) is list:
                flat += map(int, column) if name == "clipped" and set(map(type, column)) == {bool} else column
            elif plan.has_whole:
                return False
            else:
                binary.append(column)
    if flat and (binary or set(map(type, flat)) not in _PLAIN_NUMBERS):
        return False
    try:
        values = np.frombuffer(array("d", flat) if flat else b"".join(binary), np.float64)
    except OverflowError:
        return False
    if not len(values):
        return False
    low, high = max(draft.plan.low_for_all for draft in drafts), min(draft.plan.high_for_all for draft in drafts)
    is_possible = bool(low <= values.min() and values.max() <= high)
    if not is_possible and len(drafts) > 1:
        return False
    place = 0
    for draft in drafts:
        width = len(draft.plan.values)
        draft.values = values[place:place + width * draft.count].reshape(width, draft.count)
        place += width * draft.count
    plan = drafts[0].plan
    return is_possible or bool(((drafts[0].values >= plan.low) & (drafts[0].values <= plan.high)).all())


def _common_length(tap: str, sent: Mapping[str, Any]) -> int:
    """Length that all columns have."""
    lengths = set()
    for name, column in sent.items():
        if type(column) is list:
            lengths.add(len(column))
        elif is_binary(column) and len(column) % 8 == 0:
            lengths.add(len(column) // 8)
        else:
            what = "a binary string of another length than 8 bytes a value" if is_binary(column) else "no list"
            raise bad_form(f"tap {tap!r}: {str(name)[:80]!r} is {what}", "Send a list with one value per reading.",
                           f"taps.{tap}.{str(name)[:80]}")
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
        if not isinstance(name, str) or not 0 < len(name) <= 100 or not name.isprintable():
            raise bad_form("a column's name is no text, empty, too long or not printable",
                           "Use at most 100 printable letters.", place)


def _sequence(column: Any, count: int, faults: Faults) -> tuple[IntArray | None, int | None]:
    """Numbers of the readings, NO_SEQUENCE where none; and the first alone where they count up one by one."""
    if column is None or not count:
        return np.full(count, NO_SEQUENCE, np.int64), None
    if type(column) is list and set(map(type, column)) == {int}:
        first = column[0]
        if 0 <= first <= GREATEST_SEQUENCE - count and column == list(range(first, first + count)):
            return None, first
    numbers = integers_of(column, "sequence", count, NO_SEQUENCE, GREATEST_SEQUENCE, faults)
    first, last = int(numbers[0]), int(numbers[-1])
    is_even = not faults and first >= 0 and last - first == count - 1 and bool((numbers[1:] > numbers[:-1]).all())
    return numbers, first if is_even else None


def _unknown(part: Part) -> ObjectArray:
    """Columns nobody knows, as one JSON map of text per usable reading."""
    made = np.empty(len(part), object)
    for number, row in enumerate(range(part.count) if part.rows is None else part.rows.tolist()):
        made[number] = reading_json({name: part.element(name, row) for name in part.unknown_names}).decode()
    return made
