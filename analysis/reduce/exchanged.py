"""Two ports that exchange their light between one reading and the next: inputs swapped, or the light turned by 90 degrees.

From two ports both look the same: the leak turns into its inverse, the sum is kept. A turn by hand or by a drifting fibre
takes longer than one reading, which tells most of them apart; the rest only a person can. Source: docs/formulas.md, F-141.
"""

from typing import Final

import numpy as np

from analysis.quantities import DB_PER_NEPER_OF_POWER, FloatArray

#: Below this ratio the ports are too alike to speak of an exchange, dB.
LEAST_DB: Final = 3.0
#: How far the leak after may be from the inverse of that before, dB, and the sum from itself, unless noise is larger.
RATIO_WITHIN_DB: Final = 0.5
SUM_WITHIN: Final = 0.02
#: Readings on either side whose medians must say the same, and how many there must be at least.
LOOKED_AT: Final = 20
LEAST_READINGS: Final = 5
_NOISE_WITHIN: Final = 5.0
_MAD_TO_SIGMA: Final = 1.4826


def exchange_at(first: FloatArray, second: FloatArray) -> int | None:
    """Where the ports exchanged their light.

    Args:
        first, second: Nets of port 1 and 2 on one scale, in order of time, shape (N,); what is not above 0 is left out.
    Returns:
        The index of the newest reading that is the first after an exchange; None where there was none. The readings next to
        it agree with the medians of their sides: nothing lay between.
    """
    usable = np.flatnonzero((first > 0.0) & (second > 0.0))
    if len(usable) < 2 * LEAST_READINGS:
        return None
    level_db = DB_PER_NEPER_OF_POWER * np.log(first[usable] / second[usable])
    total = np.log(first[usable] + second[usable])
    steps = np.diff(level_db)
    noise_db, total_noise = _noise(steps), _noise(np.diff(total))
    jumps = np.flatnonzero((np.abs(steps) > 2.0 * LEAST_DB) & (level_db[1:] * level_db[:-1] < 0.0)) + 1
    for place in jumps[::-1].tolist():
        before, after = slice(max(place - LOOKED_AT, 0), place), slice(place, place + LOOKED_AT)
        if min(place, len(usable) - place) < LEAST_READINGS:
            continue
        one, other = float(np.median(level_db[before])), float(np.median(level_db[after]))
        within_db = max(RATIO_WITHIN_DB, _NOISE_WITHIN * noise_db)
        kept = abs(np.median(total[after]) - np.median(total[before])) <= max(SUM_WITHIN, _NOISE_WITHIN * total_noise)
        is_inverse = abs(one + other) <= within_db and min(abs(one), abs(other)) >= LEAST_DB
        is_sudden = abs(level_db[place - 1] - one) <= within_db and abs(level_db[place] - other) <= within_db
        if kept and is_inverse and is_sudden:
            return int(usable[place])
    return None


def _noise(steps: FloatArray) -> float:
    """1 sigma of a reading from first differences, robust against the jump."""
    return float(_MAD_TO_SIGMA * np.median(np.abs(steps)) / np.sqrt(2.0))
