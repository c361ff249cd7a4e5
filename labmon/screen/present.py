"""Numbers to text with unit and state word. Pure: nothing here knows a request or a row of the database.

A bound carries its sign (≥ or ≤), a missing value says so in words, and a minus sign is a real minus.
"""

import math
from datetime import UTC, datetime

MISSING = "–"
NO_BREAK = "\N{NO-BREAK SPACE}"
MINUS = "\N{MINUS SIGN}"
_POWER_STEPS = [(1.0, "W"), (1e-3, "mW"), (1e-6, "µW"), (1e-9, "nW"), (1e-12, "pW")]


def number_text(value: float | None, places: int, unit: str = "", *, sign: str = "", always_signed: bool = False) -> str:
    """``value`` with ``places`` decimals and its unit; ``sign`` is a bound's ≥ or ≤; missing or not finite: a dash."""
    if value is None or not math.isfinite(value):
        return MISSING
    rounded = round(value, places) + 0.0
    body = f"{abs(rounded):.{places}f}"
    before = MINUS if rounded < 0 else "+" if always_signed and rounded > 0 else ""
    gap = "" if unit in {"", "°"} else NO_BREAK
    bound = f"{sign}{NO_BREAK}" if sign else ""
    return f"{bound}{before}{body}{gap}{unit}"


def er_text(er_db: float | None, *, is_lower_bound: bool = False) -> str:
    """Extinction ratio, ``27.3 dB``; at the floor ``≥ 41.2 dB``."""
    return number_text(er_db, 1, "dB", sign="≥" if is_lower_bound else "")


def angle_text(angle_deg: float | None, *, is_upper_bound: bool = False, is_lower_bound: bool = False) -> str:
    """Angle on the sphere, ``6.4°``; a bound ``≤ 2.1°`` or ``≥ 12.0°``."""
    return number_text(angle_deg, 1, "°", sign="≤" if is_upper_bound else "≥" if is_lower_bound else "")


def margin_db_text(margin_db: float | None, *, is_bound: bool = False) -> str:
    """What is left to the alarm level in dB, signed: inside is plus."""
    return number_text(margin_db, 1, "dB", sign="≥" if is_bound else "", always_signed=True)


def margin_deg_text(margin_deg: float | None, *, is_bound: bool = False) -> str:
    """The same in degrees on the sphere."""
    return number_text(margin_deg, 1, "°", sign="≥" if is_bound else "", always_signed=True)


def dop_text(dop: float | None) -> str:
    """Degree of polarization, three decimals."""
    return number_text(dop, 3)


def power_text(power_w: float | None) -> str:
    """Power in the step that leaves one to three digits before the point: ``1.02 mW``."""
    if power_w is None or not math.isfinite(power_w):
        return MISSING
    size = abs(power_w)
    step, unit = next(((step, unit) for step, unit in _POWER_STEPS if size >= step), _POWER_STEPS[-1])
    return number_text(power_w / step, 2 if size < 100 * step else 0, unit)


def temperature_text(temperature_c: float | None) -> str:
    """Degrees Celsius, two decimals."""
    return number_text(temperature_c, 2, "°C")


def age_text(seconds: float | None) -> str:
    """How long ago, in at most two units: ``8 s``, ``4 min``, ``1 h 44 min``, ``3 d 5 h`` (format.js says the same)."""
    if seconds is None or not math.isfinite(seconds):
        return "never"
    whole = max(0, int(seconds))
    if whole < 60:
        return f"{whole}{NO_BREAK}s"
    if whole < 3600:
        return f"{whole // 60}{NO_BREAK}min"
    if whole < 86400:
        return f"{whole // 3600}{NO_BREAK}h{NO_BREAK}{whole % 3600 // 60:02d}"
    return f"{whole // 86400}{NO_BREAK}d{NO_BREAK}{whole % 86400 // 3600}{NO_BREAK}h"


def time_text(at: datetime | None) -> str:
    """A moment in UTC to the second; the page says once that times are UTC."""
    return MISSING if at is None else at.astimezone(UTC).strftime("%Y-%m-%d %H:%M:%S")


def count_text(count: int, one: str, many: str | None = None) -> str:
    """``1 bench``, ``3 benches``."""
    return f"{count} {one if count == 1 else many or one + 's'}"
