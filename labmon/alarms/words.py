"""An alarm in one sentence: value, limit, and how far beyond, in dB and in degrees on the sphere."""

import math

from analysis.judge.margin import margin_of
from analysis.judge.rule import Quantity

_SAID = {
    Quantity.ER_DB: "extinction ratio",
    Quantity.ANGLE_DEG: "angle from the wanted state",
    Quantity.DOP: "degree of polarization",
    Quantity.POWER_W: "power",
    Quantity.TRUSTED_SHARE: "trusted share",
    Quantity.TIME_TO_LIMIT_S: "time to the limit",
}
_WATTS = ((1.0, "W"), (1e-3, "mW"), (1e-6, "µW"), (1e-9, "nW"), (1e-12, "pW"))


def value_text(quantity: str, value: float | None) -> str:
    """A value with its unit, as the screens write it: ``18.9 dB``, ``36.2°``, ``0.94``, ``1.25 mW``; ``no value`` for None."""
    if value is None or not math.isfinite(value):
        return "no value"
    match Quantity(quantity):
        case Quantity.ER_DB:
            return f"{value:.1f} dB"
        case Quantity.ANGLE_DEG:
            return f"{value:.1f}°"
        case Quantity.DOP:
            return f"{value:.3f}"
        case Quantity.POWER_W:
            return _power_text(value)
        case Quantity.TRUSTED_SHARE:
            return f"{100.0 * value:.1f} %"
        case Quantity.TIME_TO_LIMIT_S:
            return span_text(value)


def _power_text(power_w: float) -> str:
    for scale, unit in _WATTS:
        if abs(power_w) >= scale:
            return f"{power_w / scale:.3g} {unit}"
    return f"{power_w:.3g} W"


def limit_sentence(tap_name: str, quantity: str, level: str, value: float | None, limit: float) -> str:
    """What a limit alarm says, for example
    ``b08/eom-in: extinction ratio 18.9 dB is below its alarm limit 20.0 dB by 1.1 dB (1.6°)``.
    """
    named = Quantity(quantity)
    if named is Quantity.TIME_TO_LIMIT_S:
        time = value_text(quantity, value)
        return f"{tap_name}: recent drift reaches the limit in about {time} ({level} below {span_text(limit)})"
    side = "above" if named.is_bad_above else "below"
    beyond = beyond_text(named, value, limit)
    said = f"{_SAID[named]} {value_text(quantity, value)} is {side} its {level} limit {value_text(quantity, limit)}"
    return f"{tap_name}: {said}{beyond}"


def beyond_text(quantity: Quantity, value: float | None, limit: float) -> str:
    """`` by 1.1 dB (1.6°)``; empty where there is no value, or the value is not beyond."""
    if value is None:
        return ""
    margin = margin_of(quantity, value, limit)
    parts = [
        f"{-float(amount):.1f}{unit}"
        for amount, unit in ((margin.margin_db, " dB"), (margin.margin_deg, "°"))
        if math.isfinite(amount) and amount < 0
    ]
    if not parts:
        return ""
    return f" by {parts[0]}" + (f" ({parts[1]})" if len(parts) > 1 else "")


def no_reading_sentence(tap_name: str, silent_s: float) -> str:
    """``b08/eom-in: no reading for 4 min``."""
    return f"{tap_name}: no reading for {span_text(silent_s)}"


def untrusted_sentence(tap_name: str, reasons: list[str]) -> str:
    """``b08/eom-in: reading cannot be trusted: value frozen``."""
    why = "; ".join(reason[:1].lower() + reason[1:] for reason in reasons) or "not judged"
    return f"{tap_name}: reading cannot be trusted: {why}"[:300]


def span_text(span_s: float) -> str:
    """A time in the words of the screens: ``12 s``, ``4 min``, ``1 h 44``, ``2 d 3 h``."""
    whole = int(max(span_s, 0))
    if whole < 90:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min"
    if whole < 86_400:
        return f"{whole // 3600} h {whole % 3600 // 60:02d}"
    return f"{whole // 86_400} d {whole % 86_400 // 3600} h"
