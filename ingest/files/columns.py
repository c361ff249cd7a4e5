"""Which columns a tap of each kind takes, and which of them a reading cannot do without.

The kinds are spelled as ``ingest.models.TapKind``; this module stays free of Django.
"""

_ROOM = ("temperature_c", "humidity_pct", "drive_ma")
_SPREAD = ("_min", "_max", "_sd")

COLUMNS: dict[str, tuple[str, ...]] = {
    "two-port": ("port1", "port2", *(f"port1{end}" for end in _SPREAD), *(f"port2{end}" for end in _SPREAD),
                 "averaged", "clipped", *_ROOM),
    "dark-port": ("port2", "monitor", *(f"port2{end}" for end in _SPREAD), "averaged", "clipped", *_ROOM),
    "stokes": ("s0", "s1", "s2", "s3", "azimuth_deg", "ellipticity_deg", "dop", "power", *_ROOM),
    "climate": ("temperature_c", "humidity_pct", "pressure_hpa"),
}
# A reading must hold every column of one of these groups.
NEEDED: dict[str, tuple[frozenset[str], ...]] = {
    "two-port": (frozenset({"port1", "port2"}),),
    "dark-port": (frozenset({"port2"}),),
    "stokes": (frozenset({"s0", "s1", "s2", "s3"}), frozenset({"azimuth_deg", "ellipticity_deg", "dop", "power"})),
    "climate": tuple(frozenset({column}) for column in ("temperature_c", "humidity_pct", "pressure_hpa")),
}


def needed_words(kind: str) -> str:
    """The groups in words: "port1 and port2", "temperature_c, or humidity_pct, or pressure_hpa"."""
    order = COLUMNS[kind]
    return ", or ".join(" and ".join(sorted(group, key=order.index)) for group in NEEDED[kind])
