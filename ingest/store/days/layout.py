"""The columns of a day file (docs/day-files.md), and how readings go into them and come back to the last bit."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import msgspec
import numpy as np
import pyarrow as pa

from ingest.store.arrays import DamagedBody
from ingest.store.columns import NO_SEQUENCE, NO_TIME, Readings

#: Columns that every file has, in this order; then those that the tap sent; last, where there are any, unknown ones as JSON.
AT, SEQUENCE, BOOT, BOOT_ID, OWN, ARRIVAL, SENT, TIMED = FIXED = (
    "at", "sequence", "boot", "boot_id", "own_at_offset_us", "arrival", "sent", "is_server_timed")
UNKNOWN: Final = "unknown_columns"
READ_BACK: Final = tuple(name for name in FIXED if name != BOOT)
FORM: Final = "labmon day file 1"
_TIME = pa.timestamp("us", tz="UTC")
_TYPES = {AT: _TIME, SEQUENCE: pa.int64(), BOOT: pa.dictionary(pa.int32(), pa.string()), BOOT_ID: pa.int64(), OWN: pa.int64(),
          ARRIVAL: _TIME, SENT: _TIME, TIMED: pa.bool_()}
_MAY_BE_ABSENT = {SEQUENCE, OWN}
_UNITS = {OWN: "us", "temperature_c": "°C", "humidity_pct": "%", "pressure_hpa": "hPa", "azimuth_deg": "°",
          "ellipticity_deg": "°", "dop": "1", "drive_ma": "mA", "averaged": "1", "clipped": "1", "uptime_ms": "ms"}


@dataclass(frozen=True, slots=True)
class DayAbout:
    """What a file says of itself.

    Attributes:
        columns: Value columns with their dtype, ``f8`` or ``f4``, in order.
        boots: Boot ids as sent, by row id.
    """

    station: str
    tap: str
    kind: str
    unit: str
    day: str
    columns: Mapping[str, str]
    has_unknown: bool
    boots: Mapping[int, str]


def schema_of(about: DayAbout) -> pa.Schema:
    """The schema with units and what the file says of itself."""
    taken = [*FIXED, UNKNOWN]
    if clash := [name for name in about.columns if name in taken]:
        raise ValueError(f"the column {clash[0]!r} has a name that day files keep for themselves; rename it at the station.")
    fields = [pa.field(name, _TYPES[name], nullable=name in _MAY_BE_ABSENT, metadata=_unit(name, about)) for name in FIXED]
    fields += [pa.field(name, pa.float32() if dtype == "f4" else pa.float64(), nullable=False, metadata=_unit(name, about))
               for name, dtype in about.columns.items()]
    if about.has_unknown:
        fields.append(pa.field(UNKNOWN, pa.string()))
    facts = {"form": FORM, "station": about.station, "tap": about.tap, "kind": about.kind, "unit": about.unit or None,
             "day": about.day}
    return pa.schema(fields, metadata={"labmon": msgspec.json.encode(facts).decode()})


def _unit(name: str, about: DayAbout) -> dict[str, str] | None:
    if name in _TYPES:
        return {"unit": _UNITS[name]} if name in _UNITS else None
    unit = _UNITS.get(name, about.unit)
    return {"unit": unit} if unit else None


def table_of(readings: Readings, schema: pa.Schema, boots: Mapping[int, str]) -> pa.Table:
    """Readings as a piece of the file; columns they lack are NaN."""
    has_own = readings.own_at_us != NO_TIME
    own = np.where(has_own, readings.own_at_us, readings.at_us) - readings.at_us
    ids = np.unique(readings.boot_id)
    names = pa.DictionaryArray.from_arrays(pa.array(np.searchsorted(ids, readings.boot_id).astype(np.int32)),
                                           pa.array([boots.get(number, "") for number in ids.tolist()], pa.string()))
    made: dict[str, Any] = {
        AT: _times(readings.at_us), BOOT: names, BOOT_ID: pa.array(readings.boot_id), ARRIVAL: _times(readings.arrival_us),
        SEQUENCE: pa.array(readings.sequence, mask=readings.sequence == NO_SEQUENCE),
        OWN: pa.array(own, mask=~has_own), SENT: _times(readings.sent_us), TIMED: pa.array(readings.is_server_timed)}
    for field in schema:
        if field.name == UNKNOWN:
            texts = np.full(len(readings), "", object) if readings.unknown is None else readings.unknown
            made[UNKNOWN] = pa.array(texts, pa.string(), mask=texts == "")
        elif field.name not in made:
            made[field.name] = pa.array(readings.column(field.name).astype(field.type.to_pandas_dtype(), copy=False))
    return pa.table([made[field.name] for field in schema], schema=schema)


def _times(us: Any) -> pa.Array:
    return pa.array(us).view(_TIME)


def readings_of(table: pa.Table, *, as_sent: bool = False) -> Readings:
    """The readings of a read table; values as float64, or in the file's dtype where ``as_sent``.

    Raises:
        DamagedBody: A column is missing or has another type than the layout says.
    """
    for name in READ_BACK:
        if name not in table.column_names or table.schema.field(name).type != _TYPES[name]:
            raise DamagedBody(f"the column {name} is not there as {FORM} has it")
    at_us = _integers(table, AT)
    own = _integers(table, OWN, absent=NO_TIME)
    columns = {name: _floats(table, name, as_sent) for name in table.column_names if name not in FIXED and name != UNKNOWN}
    unknown = None
    if UNKNOWN in table.column_names:
        texts = np.empty(len(table), object)
        texts[:] = ["" if text is None else text for text in table.column(UNKNOWN).to_pylist()]
        unknown = texts if (texts != "").any() else None
    return Readings(at_us, columns, _integers(table, BOOT_ID), _integers(table, SEQUENCE, absent=NO_SEQUENCE),
                    np.where(own == NO_TIME, NO_TIME, own + at_us), _integers(table, ARRIVAL), _integers(table, SENT),
                    table.column(TIMED).to_numpy(), unknown)


def _integers(table: pa.Table, name: str, absent: int | None = None) -> Any:
    column = table.column(name)
    if absent is not None and column.null_count:
        column = column.fill_null(absent)
    return column.cast(pa.int64()).to_numpy()


def _floats(table: pa.Table, name: str, as_sent: bool) -> Any:
    values = table.column(name).to_numpy()
    return values if as_sent else values.astype(np.float64, copy=False)


def wanted_names(schema_names: Sequence[str], wanted: frozenset[str] | None) -> list[str]:
    """The file's columns that a read needs: those that identify a reading, and the wanted values (None: all)."""
    return [name for name in schema_names
            if name in READ_BACK or name == UNKNOWN or (name != BOOT and (wanted is None or name in wanted))]
