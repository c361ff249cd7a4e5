"""The lasers: flicker, ageing, hops, off."""

import numpy as np
from numpy.typing import NDArray

from labmon.demo.air import LEAD_DAYS, PER_DAY, RoomAir, wander
from labmon.demo.faults import Ledger, ModeHops, PowerRaised, SourceAgeing, SourceOff
from labmon.demo.seeds import white_per_day, white_per_second

FloatArray = NDArray[np.float64]


def power_factor(laser: str, flicker: float, at_s: FloatArray, air: RoomAir, ledger: Ledger, seed: int) -> FloatArray:
    """Power of a laser relative to its first value, shape (N,).

    Half of the flicker's variance is white from second to second, half has a memory of minutes; both ports of every
    bench on the laser carry the same flicker.
    """
    days = len(air.grid_s) // PER_DAY
    slow = wander(white_per_day(seed, f"{laser} slow", -LEAD_DAYS, days, PER_DAY), flicker / np.sqrt(2.0), 90.0)
    fast = white_per_second(seed, f"{laser} fast", at_s)
    factor = 1.0 + np.interp(at_s, air.grid_s, slow) + flicker / np.sqrt(2.0) * fast
    for hops in ledger.of(ModeHops, laser):
        factor = factor * hops.power_factor(at_s)
    for ageing in ledger.of(SourceAgeing, laser):
        factor = factor * ageing.power_factor(at_s)
    for raised in ledger.of(PowerRaised, laser):
        factor = np.where(raised.lasts(at_s), raised.factor * factor, factor)
    for off in ledger.of(SourceOff, laser):
        factor = np.where(off.lasts(at_s), 0.0, factor)
    return factor
