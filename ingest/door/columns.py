"""Columns looked at value by value: what is unusual in one is a fault of its reading, never of the body."""

import math
from collections.abc import Mapping
from typing import Any

import numpy as np

from ingest.door.vocabulary import Plan, meaning_of
from ingest.models import TapKind
from ingest.stamps import parse_stamp
from ingest.store.columns import NO_TIME, FloatArray, IntArray
from ingest.times import YEAR_1_US, YEAR_10000_US

Faults = dict[int, tuple[str, str, str]]
"""By row: field, why, what to do; the first fault of a reading stands."""
WHOLE = frozenset({"sequence", "at", "uptime_ms", "averaged", "clipped"})
"""Columns of whole numbers: binary ones are int64."""
_EXACT = 1 << 53
DO_RAW = "send the raw value or leave the reading out"
_DO_TIME = "send RFC 3339 with a zone, whole microseconds since 1970, or null"


def is_binary(column: Any) -> bool:
    """A binary string of 8-byte words."""
    return type(column) is bytes


def words_of(column: bytes, name: str, unit: str) -> IntArray | FloatArray:
    """A binary column's numbers, int64 or float64: by what the column holds, and by the words where both are usual.

    Read as int64, whole numbers lie within 2^53, while float64 words do not. So stamps and counts of samples sent as
    float64 are known, and so are raw counts sent as int64 (as float64 they would be subnormal, which no converter sends).
    """
    integers, numbers = np.frombuffer(column, "<i8"), np.frombuffer(column, "<f8")
    if name in WHOLE:
        return numbers if _is_far(integers) and np.isfinite(numbers).all() else integers
    return integers if unit == "count" and not _is_far(integers) else numbers


def _is_far(integers: IntArray) -> bool:
    return bool(((integers <= -_EXACT) | (integers >= _EXACT)).any())


def integers_of(column: Any, name: str, count: int, absent: int, greatest: int, faults: Faults) -> IntArray:
    """A stamp column (sequence, uptime_ms): whole numbers from 0, ``absent`` where null; shape (count,)."""
    plain = _plain_integers(column, name, greatest)
    if plain is not None:
        return plain
    do = f"send whole numbers from 0 in {name}, or null"
    made = np.full(count, absent, np.int64)
    for row, value in enumerate(words_of(column, name, "").tolist() if is_binary(column) else column):
        if value is None:
            continue
        if not _is_number(value) or (name == "sequence" and value != int(value)):
            faults.setdefault(row, (name, f"{_shown(value)} is no {name}", do))
        elif not 0 <= value <= greatest:
            faults.setdefault(row, (name, f"{_shown(value)} is out of range for {name}", do))
        else:
            made[row] = int(value)
    return made


def _plain_integers(column: Any, name: str, greatest: int) -> IntArray | None:
    """The column at once where all its values are whole numbers in range."""
    if is_binary(column):
        numbers = words_of(column, name, "")
    elif column and set(map(type, column)) == {int}:
        try:
            numbers = np.array(column, np.int64)
        except OverflowError:
            return None
    else:
        return None
    return numbers if numbers.dtype == np.int64 and len(numbers) and 0 <= numbers.min() and numbers.max() <= greatest else None


def stamps_of(column: Any, count: int, faults: Faults) -> IntArray:
    """The column ``at``: text, whole microseconds or null; NO_TIME where null or at fault; shape (count,)."""
    made = np.full(count, NO_TIME, np.int64)
    if column is None:
        return made
    if is_binary(column):
        words = words_of(column, "at", "")
        if words.dtype == np.int64 and len(words) and words.min() >= YEAR_1_US and words.max() < YEAR_10000_US:
            return words
    for row, value in enumerate(words_of(column, "at", "").tolist() if is_binary(column) else column):
        if value is None:
            continue
        at_us = parse_stamp(value) if isinstance(value, str) else value
        if type(at_us) is float and math.isfinite(at_us) and at_us == int(at_us):
            at_us = int(at_us)
        if type(at_us) is int and YEAR_1_US <= at_us < YEAR_10000_US:
            made[row] = at_us
        else:
            faults.setdefault(row, ("at", f"{_shown(value)} is no time", _DO_TIME))
    return made


def numbers_of(sent: Mapping[str, Any], plan: Plan, count: int, kind: str, unit: str, faults: Faults) -> FloatArray:
    """The known columns one by one, NaN where absent or at fault, shape (columns, count)."""
    made = np.full((len(plan.values), count), np.nan)
    for number, name in enumerate(plan.values):
        low, high = float(plan.low[number, 0]), float(plan.high[number, 0])
        column = words_of(sent[name], name, unit).tolist() if is_binary(sent[name]) else sent[name]
        for row, value in enumerate(column):
            if (type(value) is float or type(value) is int) and low <= value <= high:
                made[number, row] = value
            elif type(value) is bool and name == "clipped":
                made[number, row] = value
            elif value is not None or plan.is_needed[number]:
                faults.setdefault(row, (name, _why(value, name), DO_RAW))
    if kind == TapKind.CLIMATE and count:
        for row in np.flatnonzero(np.isnan(made).all(axis=0)).tolist():
            faults.setdefault(row, (plan.values[0], _why(None, plan.values[0]), DO_RAW))
    return made


def _why(value: Any, name: str) -> str:
    """Why a value cannot be used."""
    return f"{_shown(value)} is {'out of range for' if _is_number(value) else 'not'} {meaning_of(name)}"


def _is_number(value: Any) -> bool:
    """An integer or a finite float; true and false are none."""
    return type(value) is int or (type(value) is float and math.isfinite(value))


def _shown(value: Any) -> str:
    """A value in a message, short."""
    if value is None or isinstance(value, bool):
        return {None: "null", True: "true", False: "false"}[value]
    if isinstance(value, float):
        return f"{value:g}".replace("nan", "not a number").replace("inf", "infinity")
    if isinstance(value, int):
        return str(value) if abs(value) < 10**20 else "a huge number"
    if isinstance(value, str):
        return repr(value if len(value) <= 40 else value[:40] + "…")
    return {list: "a list", dict: "a map", bytes: "a binary string"}.get(type(value), "this")
