"""From lines of cells to readings of one tap, and the lines that are none."""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from itertools import islice
from typing import BinaryIO

import numpy as np
from numpy.typing import NDArray

from ingest.files.columns import NEEDED
from ingest.files.faults import MappingError, MappingFault, RefusedRow
from ingest.files.lines import LINE_LIMIT, Line, Table
from ingest.files.mapping import ColumnName, ColumnRule, Mapping
from ingest.files.numbers import numbers_of
from ingest.files.times import NO_TIME, times_of
from ingest.files.units import conversion

ROWS_A_CHUNK = 20_000
LARGEST = 1e300
_NO_CELL = "\0"                                    # stands for a cell the line does not have


@dataclass(frozen=True, slots=True)
class FileRows:
    """A part of a file, in the file's order.

    ``line`` int64 (N,), ``text`` (N,) as they came, ``at_us`` int64 (N,), ``columns`` float64 (N,) each, NaN where
    the file has no value; ``refused``: the lines of this part that are no readings.
    """

    line: NDArray[np.int64]
    text: NDArray[np.object_]
    at_us: NDArray[np.int64]
    columns: dict[str, NDArray[np.float64]]
    refused: list[RefusedRow]

    def __len__(self) -> int:
        return len(self.line)


class FileReader:
    """Reads one file in parts. ``lines_read`` counts physical lines, ``lines_left_out`` headers, comments and blanks.

    Raises:
        MappingError: The header lacks a mapped column or has it twice.
        FileFault: The file cannot be read on.
    """

    def __init__(self, raw: BinaryIO, mapping: Mapping, *, kind: str, unit: str, shift: int = 0) -> None:
        self._mapping = mapping
        self._kind = kind
        self._table = Table(raw, mapping.layout, shift=shift)
        sources: list[tuple[str, ColumnName]] = [("time.column", source) for source in mapping.time.columns]
        sources += [(f"columns.{rule.name}", rule.source) for rule in mapping.columns]
        places = _places(sources, self._table.header)
        self._time_places = places[:len(mapping.time.columns)]
        self._cells = list(zip(mapping.columns, places[len(mapping.time.columns):], strict=True))
        self._convert = {rule.name: conversion(rule.name, rule.unit, unit) for rule in mapping.columns}

    @property
    def lines_read(self) -> int:
        return self._table.lines_read

    @property
    def lines_left_out(self) -> int:
        return self._table.lines_left_out

    def parts(self, rows_a_part: int = ROWS_A_CHUNK) -> Iterator[FileRows]:
        """All rows, ``rows_a_part`` at a time."""
        rows = self._table.rows()
        while lines := list(islice(rows, rows_a_part)):
            yield self._part(lines)

    def _part(self, lines: list[Line]) -> FileRows:
        refusals = _Refusals(lines)
        for index in (index for index, line in enumerate(lines) if line.cells is None):
            refusals.add(index, "line", f"is longer than {LINE_LIMIT} characters", "look at the file; is it cut into lines?")
        at_us = self._times(lines, refusals)
        columns = {rule.name: self._column(lines, rule, place, refusals) for rule, place in self._cells}
        self._refuse_incomplete(columns, refusals)
        is_sound = refusals.is_sound()
        return FileRows(line=np.array([line.number for line in lines], np.int64)[is_sound],
                        text=np.array([line.text for line in lines], object)[is_sound], at_us=at_us[is_sound],
                        columns={name: values[is_sound] for name, values in columns.items()}, refused=refusals.rows())

    def _times(self, lines: list[Line], refusals: "_Refusals") -> NDArray[np.int64]:
        texts = [" ".join(_cell(line, place) for place in self._time_places).replace(_NO_CELL, "").strip() for line in lines]
        times = times_of(texts, self._mapping.time, decimal=self._mapping.layout.decimal)
        for index in np.flatnonzero(times.at_us == NO_TIME):
            refusals.add(index, "time", f"{_short(texts[index])} {times.why[index]}",
                         "set time.zone or time.at_turn_back of the mapping, or let the logger write UTC"
                         if "happened" in times.why[index] or "zone" in times.why[index]
                         else "correct the line, or the mapping's [time]")
        return times.at_us

    def _column(self, lines: list[Line], rule: ColumnRule, place: int, refusals: "_Refusals") -> NDArray[np.float64]:
        """Our column; NaN where the file marks a missing value; other texts refuse the line."""
        texts = [_cell(line, place) for line in lines]
        missing = {"", *self._mapping.layout.missing}
        is_missing = np.fromiter((text in missing for text in texts), bool, len(texts))
        with np.errstate(over="ignore", invalid="ignore"):
            theirs = numbers_of(texts, self._mapping.layout.decimal)
            ours = self._convert[rule.name](theirs * rule.factor + rule.offset)
        for index in np.flatnonzero(~is_missing & ~(np.abs(ours) < LARGEST)):
            refusals.add(index, rule.name, *_why_no_number(texts[index], theirs[index]))
        ours[is_missing] = np.nan
        return ours

    def _refuse_incomplete(self, columns: dict[str, NDArray[np.float64]], refusals: "_Refusals") -> None:
        has = {name: ~np.isnan(values) for name, values in columns.items()}
        groups = [group for group in NEEDED[self._kind] if group <= has.keys()]
        is_whole = np.any([np.all([has[name] for name in group], axis=0) for group in groups], axis=0)
        for index in np.flatnonzero(~is_whole):
            lacking = next(name for group in groups for name in sorted(group) if not has[name][index])
            refusals.add(index, lacking, "has no value", "nothing to do where the instrument had none; it is kept as a line only")


class _Refusals:
    """The first thing wrong with each line of a part."""

    def __init__(self, lines: list[Line]) -> None:
        self._lines = lines
        self._rows: dict[int, RefusedRow] = {}

    def add(self, index: int, field: str, why: str, do: str) -> None:
        line = self._lines[index]
        self._rows.setdefault(int(index), RefusedRow(line.number, line.text, field, why, do))

    def is_sound(self) -> NDArray[np.bool_]:
        sound = np.ones(len(self._lines), bool)
        sound[list(self._rows)] = False
        return sound

    def rows(self) -> list[RefusedRow]:
        return [self._rows[index] for index in sorted(self._rows)]


def _cell(line: Line, place: int) -> str:
    return line.cells[place] if line.cells is not None and place < len(line.cells) else _NO_CELL


def _why_no_number(text: str, theirs: float) -> tuple[str, str]:
    if text == _NO_CELL:
        return "the line has too few cells", "correct the line, or look at file.delimiter"
    if np.isnan(theirs):
        return (f"{_short(text)} is not a number",
                "correct the line; if it marks a missing value, name it in file.missing; look at file.decimal")
    return f"{_short(text)} is too large", "correct the line, or the column's factor and unit"


def _short(text: str) -> str:
    return f'"{text}"' if len(text) <= 60 else f'"{text[:57]}…"'


def _places(sources: Sequence[tuple[str, ColumnName]], header: list[str]) -> list[int]:
    """The position (from 0) of each mapped column."""
    faults: list[MappingFault] = []
    places = [_place(source, header, _gatherer(faults, key)) for key, source in sources]
    if faults:
        raise MappingError(faults)
    return places


def _gatherer(faults: list[MappingFault], key: str) -> Callable[[object, str, str], None]:
    return lambda value, why, do: faults.append(MappingFault(key, value, why, do))


def _place(source: ColumnName, header: list[str], fault: Callable[[object, str, str], None]) -> int:
    if isinstance(source, int):
        if header and source > len(header):
            fault(source, f"the header line has {len(header)} columns", "count again, from 1")
        return source - 1
    count = header.count(source)
    if count == 0:
        shown = ", ".join(header[:20]) if header else "nothing"
        fault(source, "is not in the header line", f"it has {shown[:300]}; look also at file.delimiter and file.skip_lines")
    elif count > 1:
        fault(source, f"stands {count} times in the header line", "give the column's number, counted from 1")
    return header.index(source) if count else 0
