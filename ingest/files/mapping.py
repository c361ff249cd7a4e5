"""How the columns of a person's file become a tap's readings: our own small TOML, checked whole."""

import tomllib
from collections.abc import Mapping as AnyMapping
from dataclasses import dataclass
from typing import Any

from ingest.files.columns import COLUMNS, NEEDED, needed_words
from ingest.files.faults import MappingError, MappingFault
from ingest.files.rules import Rules
from ingest.files.times import COUNTED, TURN_BACK, TimeRule, check_time
from ingest.files.units import units_for

DELIMITERS = {"comma": ",", "semicolon": ";", "tab": "\t", "blanks": " ", "bar": "|"}
ColumnName = str | int


@dataclass(frozen=True, slots=True, kw_only=True)
class FileLayout:
    """How the text is cut into lines and cells. ``delimiter`` " " means: any run of blanks."""

    encoding: str = "utf-8"
    delimiter: str = ","
    decimal: str = "."
    skip_lines: int = 0
    has_header: bool = True
    skip_after_header: int = 0
    comment: str = ""
    missing: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class ColumnRule:
    """One of our columns: ours = in our unit (factor * theirs + offset, both in ``unit``)."""

    name: str
    source: ColumnName
    unit: str
    factor: float = 1.0
    offset: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Mapping:
    """Everything needed to read one tap's files. Column numbers count from 1."""

    layout: FileLayout
    time: TimeRule
    columns: tuple[ColumnRule, ...]


def mapping_from_toml(text: str, *, kind: str, unit: str) -> Mapping:
    """The mapping written in ``text`` for a tap of this kind and unit.

    Raises:
        MappingError: With every fault found: key, value, why and what to write instead.
    """
    try:
        rules = tomllib.loads(text)
    except tomllib.TOMLDecodeError as fault:
        raise MappingError([MappingFault("mapping", None, f"this is not TOML ({fault})",
                                         "see docs/files.md for a mapping that works")]) from None
    return mapping_of(rules, kind=kind, unit=unit)


def mapping_of(rules: AnyMapping[str, Any], *, kind: str, unit: str) -> Mapping:
    """The mapping that ``rules`` (from TOML, from the saved JSON or from the form) state; see mapping_from_toml."""
    top = Rules(rules)
    layout = _layout(top.table("file", required=False))
    time = check_time(top.table("time"))
    columns = _columns(top.table("columns"), kind, unit)
    top.end()
    if not layout.has_header:
        _check_numbers(top, time, columns)
    if top.faults or time is None:
        raise MappingError(top.faults)
    return Mapping(layout=layout, time=time, columns=columns)


def layout_of(table: AnyMapping[str, Any]) -> FileLayout:
    """The layout of a [file] table alone.

    Raises:
        MappingError: With its faults.
    """
    rules = Rules(table, "file")
    layout = _layout(rules)
    if rules.faults:
        raise MappingError(rules.faults)
    return layout


def rules_of(mapping: Mapping) -> dict[str, Any]:
    """The mapping as plain JSON values; ``mapping_of`` reads it back."""
    layout, time = mapping.layout, mapping.time
    rules: dict[str, Any] = {
        "file": {"encoding": layout.encoding, "delimiter": layout.delimiter, "decimal": layout.decimal,
                 "skip_lines": layout.skip_lines, "header": layout.has_header,
                 "skip_after_header": layout.skip_after_header, "comment": layout.comment,
                 "missing": list(layout.missing)},
        "time": {"columns": list(time.columns), "format": time.format},
        "columns": {rule.name: {"column": rule.source, "unit": rule.unit, "factor": rule.factor, "offset": rule.offset}
                    for rule in mapping.columns},
    }
    rules["time"] |= {key: value for key, value in (("since", time.since), ("zone", time.zone)) if value}
    rules["time"]["at_turn_back"] = time.at_turn_back
    return rules


def _layout(rules: Rules) -> FileLayout:
    delimiter = rules.text("delimiter", default=",")
    delimiter = DELIMITERS.get(delimiter, delimiter)
    if len(delimiter) != 1 or delimiter in '".\r\n\0' or delimiter.isalnum():
        rules.fault("delimiter", delimiter, "is not one separating character",
                    'write one character, or "comma", "semicolon", "tab", "blanks", "bar"')
    decimal = rules.choice("decimal", [".", ","], default=".")
    if decimal == delimiter:
        rules.fault("decimal", decimal, "is also the delimiter", 'use another delimiter, for instance ";"')
    encoding = rules.text("encoding", default="utf-8")
    if not _is_text_encoding(encoding):
        rules.fault("encoding", encoding, "is not an encoding known here",
                    'write for instance "utf-8", "utf-16", "cp1252" or "latin-1"')
    layout = FileLayout(encoding=encoding, delimiter=delimiter, decimal=decimal,
                        skip_lines=rules.whole("skip_lines", default=0),
                        has_header=rules.truth("header", default=True),
                        skip_after_header=rules.whole("skip_after_header", default=0),
                        comment=rules.text("comment", default=""),
                        missing=tuple(text.strip() for text in rules.texts("missing", default=[])))
    rules.end()
    return layout


def _is_text_encoding(name: str) -> bool:
    try:
        return isinstance("1".encode(name), bytes) and b"1".decode(name, "replace") != ""
    except (LookupError, ValueError, TypeError, AttributeError):
        return False


def _columns(rules: Rules, kind: str, tap_unit: str) -> tuple[ColumnRule, ...]:
    found = []
    for name in rules.names():
        if name not in COLUMNS[kind]:
            rules.fault(name, rules.take(name), f"is not a column of a {kind} tap", f"use {', '.join(COLUMNS[kind])}")
        else:
            found.append(_column(rules.sub(name), name, tap_unit))
    named = {rule.name for rule in found}
    if not any(group <= named for group in NEEDED[kind]):
        rules.fault("", ", ".join(sorted(named)) or None, f"a {kind} tap needs {needed_words(kind)}",
                    'say which column of the file holds it, for instance port1 = "Power A"')
    return tuple(sorted(found, key=lambda rule: COLUMNS[kind].index(rule.name)))


def _column(rules: Rules, name: str, tap_unit: str) -> ColumnRule:
    units = units_for(name, tap_unit)
    rule = ColumnRule(name=name, source=rules.column("column"), unit=rules.choice("unit", units, default=units[0]),
                      factor=rules.number("factor", default=1.0), offset=rules.number("offset", default=0.0))
    if rule.factor == 0.0:
        rules.fault("factor", 0.0, "would make every value the same", "leave it out, or write the factor meant")
    rules.end()
    return rule


def _check_numbers(top: Rules, time: TimeRule | None, columns: tuple[ColumnRule, ...]) -> None:
    named = [("time.columns", source) for source in (time.columns if time else ())]
    for key, source in named + [(f"columns.{rule.name}", rule.source) for rule in columns]:
        if isinstance(source, str) and source:
            top.fault(key, source, "the file has no header line (file.header = false)",
                      "give the column's number, counted from 1")


__all__ = ["COUNTED", "DELIMITERS", "TURN_BACK", "ColumnName", "ColumnRule", "FileLayout", "Mapping", "MappingError",
           "TimeRule", "layout_of", "mapping_from_toml", "mapping_of", "rules_of"]
