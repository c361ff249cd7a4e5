"""A limit in one line, degrees and dB side by side. Pure."""

from typing import Any

from labmon.experiments.queries import LimitFacts
from labmon.screen.present import MISSING, age_text, angle_text, dop_text, er_text, number_text, power_text
from labmon.screen.quantity import level_in_db, level_in_degrees

NAMES = {
    "er_db": "extinction ratio at least",
    "angle_deg": "angle at most",
    "dop": "degree of polarization at least",
    "power_w": "power at least",
    "trusted_share": "trusted share at least",
    "time_to_limit_s": "time to the limit at least",
}
PARTS = {"alarm": "alarm", "warning": "warning", "on_delay_s": "on-delay", "off_delay_s": "off-delay", "deadband": "deadband",
         "window_s": "window", "in_runs_only": "calls"}


def level_words(limit: LimitFacts) -> str:
    """E.g. ``extinction ratio at least 20.0 dB (11.4°), warning at 23.0 dB (8.1°), after 1 min``."""
    said = f"{NAMES[limit.quantity]} {both_units(limit.quantity, limit.alarm)}"
    if limit.warning is not None:
        said += f", warning at {both_units(limit.quantity, limit.warning)}"
    if limit.window_s is not None:
        said += f", over {age_text(limit.window_s)}"
    return f"{said}, after {age_text(limit.on_delay_s)}"


def part_text(quantity: str, part: str, value: float | bool | None) -> str:
    """One part of a limit: a level or deadband with its unit, a delay, when it calls."""
    if part == "in_runs_only":
        return "in declared runs only" if value else "always"
    if value is None:
        return "none"
    if part in ("alarm", "warning"):
        return both_units(quantity, value)
    if part == "deadband":
        return deadband_text(quantity, float(value))
    return age_text(float(value))


def deadband_text(quantity: str, value: float) -> str:
    """A deadband in its quantity's unit."""
    match quantity:
        case "er_db":
            return number_text(value, 2, "dB")
        case "angle_deg":
            return number_text(value, 2, "°")
        case "power_w":
            return power_text(value)
        case "time_to_limit_s":
            return age_text(value)
    return number_text(value, 3)


def changes_text(quantity: str, before: Any, after: Any) -> str:
    """What a version changed, old → new: ``alarm 20.0 dB (11.4°) → 17.0 dB (16.1°); on-delay 1 min → 5 min``."""
    return "; ".join(
        f"{PARTS[part]} {part_text(quantity, part, getattr(before, part))} → {part_text(quantity, part, getattr(after, part))}"
        for part in PARTS if getattr(before, part) != getattr(after, part)
    )


def both_units(quantity: str, value: float | None) -> str:
    """A value in its own unit; extinction ratios with their angle beside them, angles with their ratio."""
    if quantity == "er_db":
        return er_text(value) + _beside(angle_text(level_in_degrees(quantity, value)))
    if quantity == "angle_deg":
        return angle_text(value) + _beside(er_text(level_in_db(quantity, value)))
    if quantity == "trusted_share":
        return number_text(None if value is None else value * 100.0, 1, "%")
    if quantity == "time_to_limit_s":
        return age_text(value) if value is not None else MISSING
    return power_text(value) if quantity == "power_w" else dop_text(value)


def _beside(text: str) -> str:
    return "" if text == MISSING else f" ({text})"
