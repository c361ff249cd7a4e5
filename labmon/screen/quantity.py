"""Quantities as the screen names them, and levels of one shown in another. Pure."""

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class ShownQuantity:
    """Name, unit and decimals on the screen; ``probe`` is any value of it, to ask what it converts to."""

    name: str
    unit: str
    places: int
    probe: float


QUANTITIES = {
    "er_db": ShownQuantity("Extinction ratio", "dB", 1, 20.0),
    "angle_deg": ShownQuantity("Angle from the wanted state", "°", 1, 10.0),
    "dop": ShownQuantity("Degree of polarization", "", 3, 0.9),
    "power_w": ShownQuantity("Power", "dBm", 2, 1e-3),
    "temperature_c": ShownQuantity("Temperature", "°C", 2, 20.0),
    "humidity_pct": ShownQuantity("Humidity", "%", 1, 50.0),
    "pressure_hpa": ShownQuantity("Pressure", "hPa", 1, 1000.0),
}
_OF_KIND = {
    "two-port": ["er_db", "angle_deg", "power_w", "temperature_c"],
    "dark-port": ["er_db", "angle_deg", "power_w", "temperature_c"],
    "stokes": ["angle_deg", "er_db", "dop", "power_w", "temperature_c"],
    "climate": ["temperature_c", "humidity_pct", "pressure_hpa"],
}


def quantities_of(kind: str) -> list[str]:
    """What a tap of this kind can show, the most telling first."""
    return _OF_KIND[kind]


def angle_of_er(er_db: float) -> float:
    """Angle on the sphere, degrees: tan(γ/2) = 10^(−ER/20) (CONTRACT section 5)."""
    return math.degrees(2.0 * math.atan(10.0 ** (-er_db / 20.0)))


def er_of_angle(angle_deg: float) -> float:
    """The inverse, dB."""
    return -20.0 * math.log10(math.tan(math.radians(angle_deg) / 2.0))


def converted_level(quantity: str, level: float, shown: str) -> float | None:
    """A limit's level on the axis of another quantity; None where it has no place there. Power stands as dBm."""
    if quantity == "power_w":
        return 10.0 * math.log10(level * 1e3) if shown == "power_w" and level > 0 else None
    if quantity == shown:
        return level
    if (quantity, shown) == ("er_db", "angle_deg"):
        return angle_of_er(level)
    if (quantity, shown) == ("angle_deg", "er_db"):
        return er_of_angle(level) if 0 < level < 180 else None
    return None


def level_in_degrees(quantity: str, level: float | None) -> float | None:
    """An ER as its angle; None for other quantities."""
    return angle_of_er(level) if quantity == "er_db" and level is not None else None


def level_in_db(quantity: str, level: float | None) -> float | None:
    """An angle as its ER; None for other quantities and outside 0° to 180°."""
    return er_of_angle(level) if quantity == "angle_deg" and level is not None and 0 < level < 180 else None
