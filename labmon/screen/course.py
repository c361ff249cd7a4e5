"""The day of a bench as margins in dB, ready for its small curve. Pure."""

import math
from collections.abc import Sequence
from statistics import median

from labmon.benches.queries import BenchRow

WITHOUT_LIMIT_DB = 4.0


def margins_of(bench: BenchRow) -> list[float | None]:
    """The course's values as margins to the alarm level; without limit they hang 4 dB above the line by their median."""
    if bench.sparkline is None:
        return []
    values = list(bench.sparkline.values)
    if bench.limit_quantity is None or bench.limit_alarm is None:
        return _about_median(values)
    return [None if value is None else _margin_db(bench.limit_quantity, value, bench.limit_alarm) for value in values]


def _about_median(values: Sequence[float | None]) -> list[float | None]:
    known = [value for value in values if value is not None]
    if not known:
        return list(values)
    middle = median(known)
    return [None if value is None else value - middle + WITHOUT_LIMIT_DB for value in values]


def _margin_db(quantity: str, value: float, alarm: float) -> float | None:
    """CONTRACT section 5: ER by difference, angles by their ER, power by ratio; DOP has no margin."""
    if quantity == "er_db":
        return value - alarm
    if quantity == "angle_deg":
        return _er_of(value) - _er_of(alarm)
    if quantity == "power_w" and value > 0:
        return 10.0 * math.log10(value / alarm)
    return None


def _er_of(angle_deg: float) -> float:
    return -20.0 * math.log10(max(math.tan(math.radians(min(angle_deg, 179.9)) / 2), 1e-9))
