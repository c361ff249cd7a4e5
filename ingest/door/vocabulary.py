"""The columns a station may send: which a tap kind needs, which it may add, and what range is possible."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from ingest.models import TapKind

STAMPS = ("sequence", "at", "uptime_ms")
_SPREAD = ("_min", "_max", "_sd")
_POWERS = {TapKind.TWO_PORT: ("port1", "port2"), TapKind.DARK_PORT: ("port2", "monitor"),
           TapKind.STOKES: ("s0", "s1", "s2", "s3", "power"), TapKind.CLIMATE: ()}
_ANGLES = ("azimuth_deg", "ellipticity_deg", "dop")
_AIR = ("temperature_c", "humidity_pct", "pressure_hpa")
_ANY_TAP = ("temperature_c", "humidity_pct", "drive_ma")

# Generous: what no instrument of a laboratory can mean. Negative powers and a DOP above 1 do occur and are judged later.
_POWER_RANGE = (-1e18, 1e18)
_DBM_RANGE = (-1000.0, 1000.0)
_RANGES = {"temperature_c": (-273.15, 10_000.0), "humidity_pct": (-10.0, 120.0), "pressure_hpa": (0.0, 100_000.0),
           "azimuth_deg": (-1e6, 1e6), "ellipticity_deg": (-45.000001, 45.000001), "dop": (-1e6, 1e6), "drive_ma": (-1e9, 1e9),
           "averaged": (0.0, 2.0**53), "clipped": (0.0, 1.0)}
_WORDS = {"temperature_c": "a temperature", "humidity_pct": "a relative humidity", "pressure_hpa": "a pressure",
          "azimuth_deg": "an azimuth", "ellipticity_deg": "an ellipticity", "dop": "a degree of polarization",
          "drive_ma": "a drive current", "averaged": "a count of samples", "clipped": "true or false"}


@dataclass(frozen=True, slots=True)
class Plan:
    """How the columns of a tap's part are read; the same for every body that has these names."""

    values: tuple[str, ...]
    """Known columns that hold numbers, in order."""
    is_needed: tuple[bool, ...]
    """For each of them: a reading without it cannot be used."""
    low: npt.NDArray[np.float64]
    high: npt.NDArray[np.float64]
    """Possible range of each, shape (columns, 1)."""
    low_for_all: float
    high_for_all: float
    """Values within these are possible in every column."""
    has_whole: bool
    """One of the columns may come as whole numbers."""
    unknown: tuple[str, ...]
    missing: str
    """Words for what is missing, empty where the part is complete."""


@lru_cache(maxsize=4096)
def plan_for(kind: str, unit: str, names: tuple[str, ...]) -> Plan:
    """The plan for a tap of this kind and unit whose part has these columns."""
    known = _known(kind)
    values = tuple(name for name in names if name in known)
    needed, missing = _needed(kind, set(names))
    ranges = [possible_range(name, unit) for name in values]
    low, high = (np.array([limits[end] for limits in ranges]).reshape(-1, 1) for end in (0, 1))
    return Plan(values, tuple(name in needed for name in values), low, high,
                float(low.max(initial=-np.inf)), float(high.min(initial=np.inf)),
                unit == "count" or bool({"averaged", "clipped"} & set(values)),
                tuple(name for name in names if name not in known and name not in STAMPS), missing)


def _known(kind: str) -> set[str]:
    powers = _POWERS[TapKind(kind)]
    known = {*powers, *(power + end for power in powers for end in _SPREAD), *_ANY_TAP}
    if kind == TapKind.STOKES:
        known |= {*_ANGLES}
    if kind == TapKind.CLIMATE:
        return known | {*_AIR}
    return known | {"averaged", "clipped"}


def _needed(kind: str, names: set[str]) -> tuple[set[str], str]:
    """Columns without whose value a reading says nothing, and what is missing."""
    if kind == TapKind.CLIMATE:
        return set(), "" if names & {*_AIR} else f"a climate tap sends at least one of {', '.join(_AIR)}"
    if kind == TapKind.STOKES:
        whole, angles = {"s0", "s1", "s2", "s3"}, {"azimuth_deg", "ellipticity_deg"}
        needed = (whole if whole <= names else set()) | (angles if angles <= names else set())
        return needed, "" if needed else "a Stokes tap sends s0, s1, s2, s3, or azimuth_deg, ellipticity_deg, dop, power"
    needed = {"port2"} if kind == TapKind.DARK_PORT else {"port1", "port2"}
    lacking = sorted(needed - names)
    return needed, f"a {kind} tap sends {' and '.join(sorted(needed))}; {lacking[0]} is missing" if lacking else ""


def possible_range(name: str, unit: str) -> tuple[float, float]:
    """Smallest and largest possible value of a column."""
    if name in _RANGES:
        return _RANGES[name]
    if name.endswith("_sd"):
        return 0.0, 1e18
    return _DBM_RANGE if unit == "dBm" else _POWER_RANGE


def meaning_of(name: str) -> str:
    """What a column's number is, as in "null is not a power"."""
    return _WORDS.get(name, "a spread" if name.endswith("_sd") else "a power")
