"""Raw and reduced samples as a table: one column a quantity, its unit at the end of its name."""

from collections.abc import Mapping

import numpy as np
import pyarrow as pa

from analysis.judge.rule import Quantity
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import QUANTITIES, Trust, reasons_in
from ingest.models import Tap, TapKind
from ingest.store.columns import NO_TIME, Readings

PORT_SPREADS = ("min", "max", "sd")
BESIDE = ("temperature_c", "humidity_pct", "drive_ma", "uptime_ms")
POWERS = frozenset({"port1", "port2", "monitor", "s0", "s1", "s2", "s3", "power",
                    *(f"{port}_{spread}" for port in ("port1", "port2") for spread in PORT_SPREADS)})
RAW_COLUMNS: dict[str, tuple[str, ...]] = {
    TapKind.TWO_PORT: ("port1", "port2", *(f"port1_{one}" for one in PORT_SPREADS), *(f"port2_{one}" for one in PORT_SPREADS),
                       "averaged", "clipped", *BESIDE),
    TapKind.DARK_PORT: ("port2", *(f"port2_{one}" for one in PORT_SPREADS), "monitor", "averaged", "clipped", *BESIDE),
    TapKind.STOKES: ("s0", "s1", "s2", "s3", "azimuth_deg", "ellipticity_deg", "dop", "power", *BESIDE),
    TapKind.CLIMATE: ("temperature_c", "humidity_pct", "pressure_hpa", "uptime_ms"),
}
TIME = pa.timestamp("us", tz="UTC")
AIR = ("temperature_c", "humidity_pct", "pressure_hpa")
NUMBERS = ("er_db", "er_sigma_db", "polarized_er_db", "dop", "power_w", *AIR)
BOUNDS = ("is_lower_bound", "is_upper_bound", "angle_is_upper_bound", "angle_is_lower_bound")
ANGLES = ("angle", "azimuth", "ellipticity")
_TRUST_WORDS = np.array([one.name.lower() for one in sorted(Trust)], dtype=object)


def table_of(tap: Tap, readings: Readings, reduced: Reduced, boot_names: Mapping[int, str]) -> pa.Table:
    """The samples of one piece of a tap's history; missing values are null.

    Args:
        readings, reduced: The same N samples in the same order.
        boot_names: Name of each boot in ``readings.boot_id``; empty where the station sends none.
    """
    columns = _identity(readings, boot_names) | _raw(tap, readings)
    if tap.kind == TapKind.CLIMATE:
        return pa.table(columns | {name: _numbers(getattr(reduced, name)) for name in AIR})
    return pa.table(columns | _reduced(reduced) | _trust(reduced))


def _identity(readings: Readings, boot_names: Mapping[int, str]) -> dict[str, pa.Array]:
    has_sequence = readings.sequence >= 0
    boots, index = np.unique(readings.boot_id, return_inverse=True)
    names = np.array([boot_names.get(int(boot), "") for boot in boots], dtype=object)
    return {"at": pa.array(readings.at_us, TIME), "boot": pa.array(names[index], pa.string()),
            "sequence": pa.array(readings.sequence, pa.int64(), mask=~has_sequence),
            "own_at": pa.array(readings.own_at_us, TIME, mask=readings.own_at_us == NO_TIME),
            "arrival_at": pa.array(readings.arrival_us, TIME), "is_server_timed": pa.array(readings.is_server_timed),
            "raw_unknown": _texts(readings)}


def _texts(readings: Readings) -> pa.Array:
    """Columns that nobody knows, as one JSON object a reading; null where there are none."""
    if readings.unknown is None:
        return pa.nulls(len(readings), pa.string())
    return pa.array(readings.unknown, pa.string(), mask=readings.unknown == "")


def _raw(tap: Tap, readings: Readings) -> dict[str, pa.Array]:
    return {raw_name(name, tap.unit): _numbers(readings.column(name)) for name in RAW_COLUMNS[tap.kind]}


def raw_name(column: str, unit: str) -> str:
    """A raw column's name in the table: ``raw_port1_uW`` is port 1 as sent, in µW."""
    return f"raw_{column}_{unit}" if column in POWERS and unit else f"raw_{column}"


def _reduced(reduced: Reduced) -> dict[str, pa.Array]:
    sop = np.full((len(reduced), 3), np.nan) if reduced.sop is None else reduced.sop
    return ({name: _numbers(getattr(reduced, name)) for name in NUMBERS}
            | {f"{name}_deg": _numbers(np.degrees(getattr(reduced, f"{name}_rad"))) for name in ANGLES}
            | {f"sop{axis + 1}": _numbers(sop[:, axis]) for axis in range(3)}
            | {name: pa.array(getattr(reduced, name)) for name in BOUNDS})


def _trust(reduced: Reduced) -> dict[str, pa.Array]:
    columns: dict[str, pa.Array] = {}
    for quantity in QUANTITIES:
        columns[f"{quantity}_trust"] = pa.array(_TRUST_WORDS[reduced.trust[quantity]], pa.string())
        columns[f"{quantity}_reasons"] = pa.array(_reason_words(reduced, quantity), pa.string())
    return columns


def _reason_words(reduced: Reduced, quantity: Quantity) -> np.ndarray:
    masks, index = np.unique(reduced.reasons[quantity], return_inverse=True)
    words = np.array(["; ".join(one.words for one in reasons_in(int(mask))) for mask in masks], dtype=object)
    return words[index]


def _numbers(values: np.ndarray) -> pa.Array:
    values = np.asarray(values, dtype=np.float64)
    return pa.array(values, pa.float64(), mask=~np.isfinite(values))


