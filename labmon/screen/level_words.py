"""A limit in one line, degrees and dB side by side. Pure."""

from labmon.experiments.queries import LimitFacts
from labmon.screen.present import age_text, number_text, power_text

NAMES = {
    "er_db": "extinction ratio at least",
    "angle_deg": "angle at most",
    "dop": "degree of polarization at least",
    "power_w": "power at least",
}


def level_words(limit: LimitFacts) -> str:
    """E.g. ``extinction ratio at least 20.0 dB (11.4°), warning at 23.0 dB (8.1°), after 1 min``."""
    said = f"{NAMES[limit.quantity]} {both_units(limit.quantity, limit.alarm, limit.alarm_in_degrees, limit.alarm_in_db)}"
    if limit.warning is not None:
        said += f", warning at {both_units(limit.quantity, limit.warning, limit.warning_in_degrees, limit.warning_in_db)}"
    return f"{said}, after {age_text(limit.on_delay_s)}"


def both_units(quantity: str, level: float, in_degrees: float | None, in_db: float | None) -> str:
    """A level in its own unit with the other beside it."""
    if quantity == "er_db":
        return f"{number_text(level, 1, 'dB')} ({number_text(in_degrees, 1, '°')})"
    if quantity == "angle_deg":
        return f"{number_text(level, 1, '°')} ({number_text(in_db, 1, 'dB')})"
    return power_text(level) if quantity == "power_w" else number_text(level, 3)
