"""What the first lines of a file become under a mapping; nothing is stored."""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import BinaryIO

import numpy as np

from analysis.record.reduce_span import knowledge_of, reduce_many
from analysis.reduce.sample import Reduced
from ingest.files.faults import RefusedRow
from ingest.files.lines import Table
from ingest.files.mapping import FileLayout, Mapping
from ingest.files.parse import FileReader, FileRows
from ingest.models import Tap, TapKind
from ingest.store.columns import Readings
from ingest.times import at_of, now_us
from labmon.screen.present import (
    MISSING,
    angle_text,
    count_text,
    dop_text,
    er_text,
    number_text,
    power_text,
    temperature_text,
)

ROWS_SHOWN = 20


@dataclass(frozen=True, slots=True)
class PreviewRow:
    """A line, its time, its raw values and what they reduce to, in words."""

    line: int
    taken: str
    raw: list[str]
    reduced: list[str]


@dataclass(frozen=True, slots=True)
class Preview:
    """The first rows; ``names`` and ``quantities`` head the raw and the reduced columns."""

    sentence: str
    names: list[str]
    quantities: list[str]
    rows: list[PreviewRow]
    refused: list[RefusedRow]


def header_of(raw: BinaryIO, layout: FileLayout) -> list[str]:
    """The file's columns under this layout: names, or numbers where there are none. ``raw`` is put back to its start."""
    table = Table(raw, layout)
    first = next((line.cells for line in table.rows() if line.cells), [])
    raw.seek(0)
    return table.header or [str(place) for place in range(1, len(first) + 1)]


def preview_of(raw: BinaryIO, mapping: Mapping, tap: Tap) -> Preview:
    """What the first rows become; nothing is stored.

    Raises:
        MappingError: The header line lacks a mapped column.
        FileFault: The file cannot be read.
    """
    part = next(FileReader(raw, mapping, kind=tap.kind, unit=tap.unit).parts(ROWS_SHOWN), None)
    raw.seek(0)
    if part is None:
        return Preview("There is no row below the line of names.", [], [], [], [])
    names = list(part.columns)
    reduced = reduced_part(part, tap)
    quantities, texts = _reduced_texts(reduced, tap)
    rows = [PreviewRow(int(part.line[index]), _taken_text(int(part.at_us[index])),
                       [_raw_text(part.columns[name][index]) for name in names], texts[index]) for index in range(len(part))]
    return Preview(_sentence(part), names, quantities, rows, part.refused)


def _sentence(part: FileRows) -> str:
    said = f"Of the first {count_text(len(part) + len(part.refused), 'row')}, {len(part)} can be read"
    if not part.refused:
        return said + "."
    return f"{said}; {len(part.refused)} would be set aside."


def reduced_part(part: FileRows, tap: Tap) -> Reduced:
    """The rows through the same reduction as stored readings, with the tap's calibrations."""
    count = len(part)
    readings = Readings(at_us=part.at_us, columns=part.columns, boot_id=np.zeros(count, np.int64), sequence=np.arange(count),
                        own_at_us=part.at_us, arrival_us=np.full(count, now_us()), sent_us=np.full(count, now_us()),
                        is_server_timed=np.zeros(count, bool)).sorted()
    many = reduce_many([tap], {tap.pk: readings}, knowledge_of([tap.pk]), {tap.pk: None})
    back = np.empty(count, np.int64)
    back[readings.sequence] = np.arange(count)
    return many.samples_of(tap.pk).take(back)


def _reduced_texts(reduced: Reduced, tap: Tap) -> tuple[list[str], list[list[str]]]:
    columns: dict[str, Iterable[str]]
    if tap.kind == TapKind.CLIMATE:
        columns = {"Temperature": map(temperature_text, reduced.temperature_c),
                   "Humidity": (number_text(humidity_pct, 1, "%") for humidity_pct in reduced.humidity_pct),
                   "Pressure": (number_text(pressure_hpa, 1, "hPa") for pressure_hpa in reduced.pressure_hpa)}
    else:
        ers = zip(reduced.er_db, reduced.is_lower_bound, strict=True)
        angles = zip(np.degrees(reduced.angle_rad), reduced.angle_is_upper_bound, strict=True)
        columns = {"ER": (er_text(er_db, is_lower_bound=bool(is_bound)) for er_db, is_bound in ers),
                   "Angle": (angle_text(angle_deg, is_upper_bound=bool(is_bound)) for angle_deg, is_bound in angles),
                   "Power": map(power_text, reduced.power_w)}
        if tap.kind == TapKind.STOKES:
            columns["DOP"] = map(dop_text, reduced.dop)
    return list(columns), [list(row) for row in zip(*columns.values(), strict=True)]


def _raw_text(value: float) -> str:
    return MISSING if np.isnan(value) else f"{value:.7g}"


def _taken_text(at_us: int) -> str:
    return at_of(at_us).isoformat(" ", "milliseconds").removesuffix("+00:00")
