"""Reduced samples: what the raw readings of a tap mean."""

from collections.abc import Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import BoolArray, FloatArray, IntArray
from analysis.reduce.trust import QUANTITIES, ReasonArray, TrustArray


@dataclass(slots=True, kw_only=True)
class Reduced:
    """Quantities of N samples; every array has shape (N,) unless said, NaN where undefined.

    Attributes:
        at_us: Data time, µs since 1970 UTC.
        wanted_power, other_power: Signed net powers of the wanted and the other port, in the tap's linear unit.
        power_w: Sum of both ports, W (S0 for Stokes taps); NaN for taps in V or count.
        er_db: Port extinction ratio, dB; where ``is_lower_bound`` (``is_upper_bound``) the true one is at least
            (at most) this, one-sided 95 %.
        er_sigma_db: 1 sigma of ``er_db``, first order; NaN for bounds and where no noise is known.
        angle_rad: Angle on the sphere from the wanted state, rad; an upper bound where ``angle_is_upper_bound``,
            a lower bound where ``angle_is_lower_bound``.
        polarized_er_db: Extinction ratio of the polarized part alone (Stokes taps).
        sop: Unit Stokes vectors, shape (N, 3), optics convention; None where the tap gives none.
        trust, reasons: Per judged quantity.
    """

    at_us: IntArray
    wanted_power: FloatArray
    other_power: FloatArray
    power_w: FloatArray
    er_db: FloatArray
    er_sigma_db: FloatArray
    is_lower_bound: BoolArray
    is_upper_bound: BoolArray
    angle_rad: FloatArray
    polarized_er_db: FloatArray
    dop: FloatArray
    azimuth_rad: FloatArray
    ellipticity_rad: FloatArray
    sop: FloatArray | None
    temperature_c: FloatArray
    humidity_pct: FloatArray
    pressure_hpa: FloatArray
    trust: dict[Quantity, TrustArray]
    reasons: dict[Quantity, ReasonArray]
    angle_is_upper_bound: BoolArray
    angle_is_lower_bound: BoolArray

    def __len__(self) -> int:
        return len(self.at_us)

    def values(self, quantity: Quantity) -> FloatArray:
        """A judged quantity in its limit's unit (degrees for the angle), shape (N,)."""
        if quantity is Quantity.ANGLE_DEG:
            return np.degrees(self.angle_rad)
        return getattr(self, quantity.value)

    def take(self, index: Any) -> "Reduced":
        """The samples chosen by a slice, mask or index array."""
        return Reduced(**{name: _taken(getattr(self, name), index) for name in _NAMES})


_NAMES = tuple(field.name for field in fields(Reduced))


def concatenate(parts: Sequence[Reduced]) -> Reduced:
    """Several spans one after the other; without any SOP the result has none, else NaN rows fill in."""
    if len(parts) == 1:
        return parts[0]
    joined: dict[str, Any] = {}
    for name in _NAMES:
        values = [getattr(part, name) for part in parts]
        if name in ("trust", "reasons"):
            joined[name] = {quantity: np.concatenate([value[quantity] for value in values]) for quantity in QUANTITIES}
        elif name == "sop":
            joined[name] = _joined_sop(parts)
        else:
            joined[name] = np.concatenate(values)
    return Reduced(**joined)


def _joined_sop(parts: Sequence[Reduced]) -> FloatArray | None:
    if all(part.sop is None for part in parts):
        return None
    return np.concatenate([np.full((len(part), 3), np.nan) if part.sop is None else part.sop for part in parts])


def _taken(value: Any, index: Any) -> Any:
    if isinstance(value, dict):
        return {key: array[index] for key, array in value.items()}
    return None if value is None else value[index]


def empty_fields(at_us: IntArray) -> dict[str, Any]:
    """Fields of `Reduced` with nothing measured yet: NaN, False and trust *none*."""
    count = len(at_us)
    nothing, never = np.full(count, np.nan), np.zeros(count, dtype=bool)
    floats = (
        "wanted_power",
        "other_power",
        "power_w",
        "er_db",
        "er_sigma_db",
        "angle_rad",
        "polarized_er_db",
        "dop",
        "azimuth_rad",
        "ellipticity_rad",
        "temperature_c",
        "humidity_pct",
        "pressure_hpa",
    )
    bools = ("is_lower_bound", "is_upper_bound", "angle_is_upper_bound", "angle_is_lower_bound")
    return {
        "at_us": at_us,
        "sop": None,
        **dict.fromkeys(floats, nothing),
        **dict.fromkeys(bools, never),
        "trust": {quantity: np.zeros(count, dtype=np.uint8) for quantity in QUANTITIES},
        "reasons": {quantity: np.zeros(count, dtype=np.uint32) for quantity in QUANTITIES},
    }
