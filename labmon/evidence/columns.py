"""What the columns of the package's tables mean, with unit: beside every CSV as JSON."""

from typing import Any

MEANINGS: dict[str, tuple[str, str]] = {
    "at": ("", "when the reading was taken, RFC 3339, UTC"),
    "boot": ("", "the station's own name of the time since its last start; empty where it sends none"),
    "sequence": ("", "the station's running number within that time"),
    "own_at": ("", "the station's own stamp, RFC 3339, UTC; empty where it sent none"),
    "arrival_at": ("", "when the server had it, RFC 3339, UTC"),
    "is_server_timed": ("", "true where the station's clock was not used for at"),
    "er_db": ("dB", "port extinction ratio made from the raw columns with zeros, gain and leakage; a 95 % bound where said"),
    "is_lower_bound": ("", "true: the extinction ratio is at least er_db"),
    "is_upper_bound": ("", "true: the extinction ratio is at most er_db"),
    "angle_deg": ("deg", "angle on the Poincaré sphere from the wanted state"),
    "dop": ("1", "degree of polarization"),
    "power_w": ("W", "power of both ports"),
    "er_db_reasons": ("", "why er_db is a bound, doubtful or untrusted, in words"),
}
TRUST = "trusted, doubtful (judged, with its reason), untrusted (not judged), or none (not measured)"
RAW_UNITS = {"temperature_c": "deg C", "humidity_pct": "%", "drive_ma": "mA", "uptime_ms": "ms", "azimuth_deg": "deg",
             "ellipticity_deg": "deg", "pressure_hpa": "hPa", "dop": "1", "averaged": "1", "clipped": "1"}


def columns_facts(names: list[str], unit: str) -> list[dict[str, Any]]:
    """Name, unit and meaning of each column, in order."""
    return [{"name": name, "unit": found[0], "meaning": found[1]} for name in names for found in [_found(name, unit)]]


def _found(name: str, unit: str) -> tuple[str, str]:
    if name in MEANINGS:
        return MEANINGS[name]
    if name.endswith("_trust"):
        return "", f"trust of {name.removesuffix('_trust')}: {TRUST}"
    if name == "raw_unknown":
        return "", "columns nobody knows, as one JSON object"
    plain = name.removeprefix("raw_")
    if unit and plain.endswith(f"_{unit}"):
        return unit, f"{plain.removesuffix(f'_{unit}')} as sent: no zero taken off, no gain applied"
    return RAW_UNITS.get(plain, ""), f"{plain} as sent"
