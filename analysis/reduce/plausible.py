"""Whether raw port readings can be what their unit says: for a person who joins a bench, never a reason to refuse.

The bounds are our own: powers beyond them are not met in a laboratory's single-mode fibres. A continuous 10 W destroys a
usual fibre connector; 0.1 pW lies below any slow detector that is not cooled (common practice, no source).
Source: docs/formulas.md, F-117.
"""

from enum import StrEnum
from typing import Final

import numpy as np

from analysis.quantities import FloatArray, linear_from_raw, watts_per_unit

STRONGEST_W: Final = 10.0
WEAKEST_W: Final = 1e-13
#: Fewer readings than this say nothing about constancy: a slow converter repeats itself.
LEAST_READINGS: Final = 10
#: Logarithmic readings that all lie so near 0 look like linear ones.
LINEAR_LOOK_DBM: Final = 0.2


class Oddity(StrEnum):
    """Why a column of powers is improbable."""

    TOO_STRONG = "too strong"
    TOO_WEAK = "too weak"
    NEGATIVE = "negative"
    CONSTANT = "constant"
    LOOKS_LOGARITHMIC = "looks like dBm"
    LOOKS_LINEAR = "looks linear"


def oddity_of(raw: FloatArray, unit: str) -> Oddity | None:
    """The gravest oddity of one port's raw readings; None where they can be meant, or there are none.

    Args:
        raw: As sent, in ``unit``, shape (N,); NaN is left out.
        unit: ``W mW uW dBm``; ``V`` and ``count`` have no power to be judged by, only signs and constancy.
    """
    raw = np.asarray(raw, dtype=np.float64)
    raw = raw[np.isfinite(raw)]
    if not len(raw):
        return None
    middle = float(np.median(raw))
    if unit == "dBm":
        if len(raw) >= LEAST_READINGS and bool((np.abs(raw) < LINEAR_LOOK_DBM).all()) and bool((raw >= 0.0).all()):
            return Oddity.LOOKS_LINEAR
    elif middle < -1.0 and unit in {"W", "mW", "uW"}:
        return Oddity.LOOKS_LOGARITHMIC
    elif middle < 0.0:
        return Oddity.NEGATIVE
    power_w = float(linear_from_raw(np.array([middle]), unit)[0] * watts_per_unit(unit))
    if power_w > STRONGEST_W:
        return Oddity.TOO_STRONG
    if len(raw) >= LEAST_READINGS and bool((raw == raw[0]).all()):
        return Oddity.CONSTANT
    if power_w < WEAKEST_W and middle != 0.0:
        return Oddity.TOO_WEAK
    return None
