"""Thermal arc of a polarization-maintaining fibre: what its two fits share."""

import math
from dataclasses import dataclass
from enum import StrEnum
from typing import Final

from analysis.quantities import er_db_from_angle_rad

LEAST_HALF_ARC_RAD: Final = 0.6
WIDEST_BAND_DB: Final = 3.0


class ArcVerdict(StrEnum):
    """What an arc allows to be said."""

    MEASURED = "measured"
    TOO_SHORT = "arc too short"
    NO_ARC = "no arc shown"


@dataclass(frozen=True, slots=True)
class WorstEr:
    """Lowest ER that the fibre reaches as its phase turns, with its 95 % band, dB; low ≤ value ≤ high."""

    er_db: float
    low_db: float
    high_db: float


def verdict_of(half_arc_rad: float, worst: WorstEr) -> ArcVerdict:
    """Too short below ±0.6 rad, or where the band is wider than 3 dB or open. Source: docs/formulas.md, F-77."""
    if not half_arc_rad >= LEAST_HALF_ARC_RAD:
        return ArcVerdict.TOO_SHORT
    return ArcVerdict.MEASURED if worst.high_db - worst.low_db <= WIDEST_BAND_DB else ArcVerdict.TOO_SHORT


def er_db_of_fraction(fraction: float) -> float:
    """ER, dB, with ``fraction`` x of all the light in the unwanted port: 10 log₁₀((1 - x)/x); inf at or below 0, -inf from 1."""
    if math.isnan(fraction):
        return math.nan
    if fraction <= 0.0:
        return math.inf
    return 10.0 * math.log10((1.0 - fraction) / fraction) if fraction < 1.0 else -math.inf


def farthest_rad(radius_rad: float, tilt_rad: float) -> float:
    """Largest angle from a state to a circle whose axis lies ``tilt_rad`` away, all on the sphere: ρ + t, folded at π."""
    reach = radius_rad + tilt_rad
    return reach if reach <= math.pi else 2.0 * math.pi - reach


def worst_er_of_circle_db(radius_rad: float, tilt_rad: float) -> float:
    """Lowest ER, dB, on that circle: -20 log₁₀ tan((ρ + t)/2). Source: docs/formulas.md, F-77."""
    return float(er_db_from_angle_rad(farthest_rad(radius_rad, tilt_rad)))
