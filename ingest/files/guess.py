"""A proposal for the mapping, from the first lines of a file; a person looks at it before anything is read in."""

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import islice
from typing import Any, BinaryIO

import numpy as np

from ingest.files.columns import COLUMNS
from ingest.files.guess_time import TimeGuess, guess_time
from ingest.files.lines import LINE_LIMIT, cells_of, first_bytes, text_lines
from ingest.files.numbers import numbers_of
from ingest.files.units import units_for

LINES_LOOKED_AT = 200
_COMMENT_SIGNS = ("#", "%", "//", "!")
_TIME_LIKE = re.compile(r"(?=.)(?:\d{1,4}[-./]\d{1,2}[-./]\d{1,4}[T ]?)?(?:\d{1,2}:\d\d[\d:.,+\-Z ]*(?:[AP]M)?)?", re.ASCII)
_UNIT_IN_NAME = re.compile(r"[\s_(\[/]*([A-Za-zµ°%]+)[)\]]?\s*$")
_UNIT_WORDS = {"mw": "mW", "uw": "uW", "µw": "uW", "nw": "nW", "w": "W", "dbm": "dBm", "v": "V", "c": "degC", "°c": "degC",
               "degc": "degC", "k": "K", "f": "degF", "°f": "degF", "hpa": "hPa", "mbar": "mbar", "pa": "Pa", "kpa": "kPa",
               "%": "%", "pct": "%", "deg": "deg", "°": "deg", "rad": "rad", "ma": "mA", "a": "A"}
_NAME_STARTS = {"temperature_c": ("temp",), "humidity_pct": ("hum", "rh"), "pressure_hpa": ("press", "baro"),
                "azimuth_deg": ("azi",), "ellipticity_deg": ("elli",), "dop": ("dop",), "power": ("power", "pow"),
                "monitor": ("monitor", "mon"), "drive_ma": ("drive",)}


@dataclass(frozen=True, slots=True)
class Proposal:
    """``rules`` in the form that ``mapping_of`` takes (perhaps with gaps), what was seen, and the first lines.

    ``header`` names the columns (their numbers where the file has none).
    """

    rules: dict[str, Any]
    header: list[str]
    first_lines: list[str]
    interval_s: float | None
    notes: list[str] = field(default_factory=list)


def propose(raw: BinaryIO, *, kind: str, unit: str) -> Proposal:
    """What the first 200 lines look like, for a tap of this kind and unit."""
    encoding = guess_encoding(first_bytes(raw, 4096))
    lines = [text[:LINE_LIMIT] for _, text in islice(text_lines(raw, encoding), LINES_LOOKED_AT)]
    raw.seek(0)
    comment = next((sign for sign in _COMMENT_SIGNS if any(line.lstrip().startswith(sign) for line in lines)), "")
    delimiter, decimal = _signs([line for line in lines if not _is_nothing(line, comment)])
    layout = {"encoding": encoding, "delimiter": delimiter, "decimal": decimal, "comment": comment}
    head = _head([[] if _is_nothing(line, comment) else cells_of(line, delimiter) for line in lines], decimal)
    rows = head.rows
    time = guess_time(rows, head.names, decimal) if rows else None
    names = head.names or [str(place + 1) for place in range(len(rows[0]) if rows else 0)]
    rules = {"file": layout | head.rules, "time": _time_rules(time, head),
             "columns": _columns(names, bool(head.names), time, rows, decimal, kind=kind, unit=unit)}
    notes = [time.note] if time and time.note else []
    if not rows:
        notes.append("No lines of numbers were found: look at delimiter and header lines.")
    elif time is None:
        notes.append("No column of times was found: name it below.")
    return Proposal(rules, names, lines[:20], time.interval_s if time else None, notes)


def guess_encoding(start: bytes) -> str:
    """UTF-16 by its mark, UTF-8 where the bytes allow it, else cp1252."""
    if start.startswith((b"\xff\xfe", b"\xfe\xff")):
        return "utf-16"
    for cut in range(4):                           # the last character may be cut in two
        try:
            start[:len(start) - cut].decode("utf-8")
            return "utf-8"
        except UnicodeDecodeError:
            continue
    return "cp1252"


@dataclass(frozen=True, slots=True)
class _Head:
    rules: dict[str, Any]
    names: list[str]
    rows: list[list[str]]


def _is_nothing(line: str, comment: str) -> bool:
    return not line.strip() or bool(comment and line.lstrip().startswith(comment))


def _signs(lines: Sequence[str]) -> tuple[str, str]:
    """Delimiter and decimal sign under which most cells are numbers or times and most lines are equally long."""
    def score(signs: tuple[str, str]) -> tuple[float, bool, int]:
        delimiter, decimal = signs
        cut = [cells_of(line, delimiter) for line in lines[-50:]]
        width, count = Counter(len(cells) for cells in cut).most_common(1)[0]
        cells = [cell for row in cut if len(row) == width for cell in row if cell]
        is_value = _are_values(cells, decimal)
        share = count / len(cut) * (sum(is_value) / len(cells) if cells else 0.0)
        return (share if width > 1 else 0.0, delimiter != " ", width)

    pairs = [(";", "."), (";", ","), ("\t", "."), ("\t", ","), (",", "."), ("|", "."), ("|", ","), (" ", "."), (" ", ",")]
    return max(pairs, key=score) if lines else (",", ".")


def _are_values(cells: Sequence[str], decimal: str) -> list[bool]:
    is_number = np.isfinite(numbers_of(cells, decimal))
    return [bool(number) or bool(_TIME_LIKE.fullmatch(cell)) for cell, number in zip(cells, is_number, strict=True)]


def _head(cut: Sequence[list[str]], decimal: str) -> _Head:
    """Where the numbers begin, and the line of names before them."""
    widths = Counter(len(cells) for cells in cut if cells)
    width = max(widths, key=lambda size: (widths[size], size)) if widths else 0
    is_row = [len(cells) == width and 2 * sum(_are_values(cells, decimal)) >= max(sum(map(bool, cells)), 1) for cells in cut]
    start = is_row.index(True) if True in is_row else len(cut)
    before = [index for index in range(start) if len(cut[index]) == width]
    rows = [cells for cells, row in zip(cut, is_row, strict=True) if row]
    if not before or not rows:
        return _Head({"header": False, "skip_lines": start if rows else 0}, [], rows)
    name_line = before[-2] if len(before) > 1 and before[-2] == before[-1] - 1 else before[-1]
    return _Head({"header": True, "skip_lines": name_line, "skip_after_header": start - name_line - 1}, cut[name_line], rows)


def _source(place: int, head_names: Sequence[str]) -> str | int:
    """A column's name where it has one of its own, else its number."""
    name = head_names[place] if place < len(head_names) else ""
    return name if name and list(head_names).count(name) == 1 else place + 1


def _time_rules(time: TimeGuess | None, head: _Head) -> dict[str, Any]:
    if time is None:
        return {"columns": [], "format": "iso"}
    return {"columns": [_source(place, head.names) for place in time.places], "format": time.format}


def _columns(names: Sequence[str], has_names: bool, time: TimeGuess | None, rows: Sequence[Sequence[str]], decimal: str,
             *, kind: str, unit: str) -> dict[str, dict[str, Any]]:
    taken = set(time.places) if time else set()
    found: dict[str, dict[str, Any]] = {}
    for ours in COLUMNS[kind] if has_names else ():
        place = next((place for place, name in enumerate(names) if place not in taken and _is_named(name, ours)), None)
        if place is not None:
            taken.add(place)
            found[ours] = {"column": _source(place, names), "unit": _unit(names[place], ours, unit)}
    if {"s0", "s1", "s2", "s3"} <= found.keys():   # the ellipse says the same again
        found = {ours: rule for ours, rule in found.items() if ours not in {"azimuth_deg", "ellipticity_deg", "dop", "power"}}
    if kind == "two-port" and not {"port1", "port2"} & found.keys():
        free = [place for place in _number_places(rows, decimal) if place not in taken]
        for ours, place in zip(("port1", "port2"), free if len(free) == 2 else [], strict=False):
            found[ours] = {"column": _source(place, names if has_names else []), "unit": _unit(names[place], ours, unit)}
    return found


def _is_named(name: str, ours: str) -> bool:
    plain = re.sub(r"[^a-z0-9]", "", name.lower())
    bare = re.sub(r"[^a-z0-9]", "", _UNIT_IN_NAME.sub("", name.lower()))
    own = re.sub(r"[^a-z0-9]", "", ours)
    return own in {plain, bare} or plain.startswith(_NAME_STARTS.get(ours, ()))


def _unit(name: str, ours: str, tap_unit: str) -> str:
    possible = units_for(ours, tap_unit)
    found = _UNIT_IN_NAME.search(name)
    word = _UNIT_WORDS.get(found[1].lower(), "") if found else ""
    return word if word in possible else possible[0]


def _number_places(rows: Sequence[Sequence[str]], decimal: str) -> list[int]:
    """Columns in which most cells are numbers."""
    width = min((len(row) for row in rows), default=0)
    return [place for place in range(width) if np.mean(np.isfinite(numbers_of([row[place] for row in rows], decimal))) > 0.7]
