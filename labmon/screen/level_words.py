"""A limit in one line, degrees and dB side by side. Pure."""

from labmon.experiments.queries import LimitFacts
from labmon.screen.present import MISSING, age_text, angle_text, dop_text, er_text, power_text
from labmon.screen.quantity import level_in_db, level_in_degrees

NAMES = {
    "er_db": "extinction ratio at least",
    "angle_deg": "angle at most",
    "dop": "degree of polarization at least",
    "power_w": "power at least",
}


def level_words(limit: LimitFacts) -> str:
    """E.g. ``extinction ratio at least 20.0 dB (11.4°), warning at 23.0 dB (8.1°), after 1 min``."""
    said = f"{NAMES[limit.quantity]} {both_units(limit.quantity, limit.alarm)}"
    if limit.warning is not None:
        said += f", warning at {both_units(limit.quantity, limit.warning)}"
    return f"{said}, after {age_text(limit.on_delay_s)}"


def both_units(quantity: str, value: float | None) -> str:
    """A value in its own unit; extinction ratios with their angle beside them, angles with their ratio."""
    if quantity == "er_db":
        return er_text(value) + _beside(angle_text(level_in_degrees(quantity, value)))
    if quantity == "angle_deg":
        return angle_text(value) + _beside(er_text(level_in_db(quantity, value)))
    return power_text(value) if quantity == "power_w" else dop_text(value)


def _beside(text: str) -> str:
    return "" if text == MISSING else f" ({text})"
