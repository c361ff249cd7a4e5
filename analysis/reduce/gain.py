"""Gain ratio of the two ports from one exchange of the polarizations."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.quantities import DB_PER_NEPER_OF_POWER, FloatArray


@dataclass(frozen=True, slots=True)
class Exchange:
    """What one exchange tells: gain 1 / gain 2 and the ER free of it, each with 1 sigma; shapes of the readings."""

    gain_ratio: FloatArray
    gain_ratio_sigma: FloatArray
    er_db: FloatArray
    er_sigma_db: FloatArray


def gain_ratio_from_exchange(
    port1: Any, port2: Any, port1_exchanged: Any, port2_exchanged: Any, *, relative_sigma: Any = 0.0
) -> Exchange:
    """Gain ratio and gain-free ER from readings before and after the light was turned by 90 degrees.

    The state and the splitter must stay as they are, but for the turn; the power may change. A leaky splitter with
    unequal leakages shows as a gain: take its leakage off first.

    Args:
        port1, port2: Readings with the wanted light in port 1, behind the zeros, one linear unit, any shape.
        port1_exchanged, port2_exchanged: The same with the wanted light in port 2.
        relative_sigma: 1 sigma / reading of each of the four, in this order along the first axis, or one for all.
    Returns:
        See `Exchange`: g = sqrt(V1 V1' / (V2 V2')), ER = 5 log10(V1 V2' / (V2 V1')). NaN where a reading is NaN.
    Raises:
        ValueError: A reading is not above 0. Source: docs/formulas.md, F-25.
    """
    readings = np.broadcast_arrays(*(np.asarray(x, dtype=np.float64) for x in (port1, port2, port1_exchanged, port2_exchanged)))
    names = ("port1", "port2", "port1_exchanged", "port2_exchanged")
    for name, reading in zip(names, readings, strict=True):
        if (reading <= 0.0).any():
            raise ValueError(f"{name} is not above 0; take the zero off, and use light that both ports see in both positions.")
    log1, log2, log1_exchanged, log2_exchanged = np.log(readings)
    gain = np.exp(0.5 * (log1 + log1_exchanged - log2 - log2_exchanged))
    er_db = 0.5 * DB_PER_NEPER_OF_POWER * (log1 + log2_exchanged - log2 - log1_exchanged)
    relative = np.asarray(relative_sigma, dtype=np.float64)
    four = relative if relative.ndim and relative.shape[0] == 4 else np.broadcast_to(relative, (4, *relative.shape))
    half_sigma = 0.5 * np.sqrt(np.square(four).sum(axis=0))
    return Exchange(gain, gain * half_sigma, er_db, np.broadcast_to(DB_PER_NEPER_OF_POWER * half_sigma, er_db.shape))
