"""Which cells look like the time of a reading, and how it is written."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ingest.files.numbers import numbers_of
from ingest.files.times import COUNTED, NO_TIME, TimeRule, times_of

_DATES = ("%d.%m.%Y", "%d/%m/%Y", "%m/%d/%Y", "%Y/%m/%d", "%d-%m-%Y", "%Y%m%d", "%d.%m.%y", "%d/%m/%y", "%m/%d/%y", "%Y-%m-%d")
_HOURS = ("%H:%M:%S", "%H:%M:%S.%f", "%H:%M:%S,%f", "%H:%M", "%I:%M:%S %p", "%H%M%S")
_EXCHANGED = {"%d/%m/%Y": "%m/%d/%Y", "%d/%m/%y": "%m/%d/%y"}


@dataclass(frozen=True, slots=True)
class TimeGuess:
    """Columns by position from 0; ``has_zone`` when every text carries its own; ``note`` is for the person."""

    places: tuple[int, ...]
    format: str
    has_zone: bool
    interval_s: float | None
    note: str = ""


def guess_time(rows: Sequence[Sequence[str]], names: Sequence[str], decimal: str) -> TimeGuess | None:
    """The first column, or pair of neighbours, in which every row is a time; else a column of counted time."""
    width = min((len(row) for row in rows), default=0)
    for places in [(place,) for place in range(width)] + [(place, place + 1) for place in range(width - 1)]:
        texts = [" ".join(row[place] for place in places) for row in rows]
        if guess := _written(texts, places):
            return guess
    return _counted(rows, names, decimal, width)


def _written(texts: Sequence[str], places: tuple[int, ...]) -> TimeGuess | None:
    if not any(sign in texts[0] for sign in ":-./") and not (texts[0][:1].isdigit() and " " in texts[0]):
        return None
    for codes in ["iso", *(f"{date} {hours}" for date in _DATES for hours in _HOURS)]:
        at_us = times_of(texts, TimeRule(columns=(), format=codes, zone="UTC")).at_us
        if np.all(at_us != NO_TIME):
            return TimeGuess(places, codes, _has_zone(texts, codes), _interval_s(at_us), _day_note(texts, codes))
    return None


def _has_zone(texts: Sequence[str], codes: str) -> bool:
    return codes == "iso" and bool(np.all(times_of(texts, TimeRule(columns=(), format="iso")).at_us != NO_TIME))


def _day_note(texts: Sequence[str], codes: str) -> str:
    date, _, hours = codes.partition(" ")
    other = TimeRule(columns=(), format=f"{_EXCHANGED.get(date)} {hours}", zone="UTC")
    if date in _EXCHANGED and np.all(times_of(texts, other).at_us != NO_TIME):
        return "Day and month cannot be told apart in these lines: check the time format."
    return ""


def _interval_s(at_us: np.ndarray) -> float | None:
    return float(np.median(np.diff(at_us))) / 1e6 if len(at_us) > 1 else None


def _counted(rows: Sequence[Sequence[str]], names: Sequence[str], decimal: str, width: int) -> TimeGuess | None:
    for place in range(width):
        name = names[place].lower() if place < len(names) else ""
        count = numbers_of([row[place] for row in rows], decimal)
        if not name.startswith(("t", "elapsed", "uptime", "sec", "ms")) or name.startswith("temp"):
            continue
        if np.all(np.isfinite(count)) and np.all(np.diff(count) >= 0):
            unit = "milliseconds since" if "ms" in name.replace("(", " ").replace("_", " ").split() else "seconds since"
            interval_s = float(np.median(np.diff(count))) * COUNTED[unit] / 1e6 if len(count) > 1 else None
            return TimeGuess((place,), unit, False, interval_s, "The time is counted: say when the count began.")
    return None
