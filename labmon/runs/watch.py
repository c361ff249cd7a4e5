"""What the page of a run asks while it lasts: how long until a limit."""

from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np

from analysis.judge.rule import Quantity
from analysis.outlook.time_to_limit import TimeToLimit, time_to_er_limit, time_to_limit
from analysis.quantities import US_PER_S
from analysis.record.rollups import history
from labmon.runs.limits import RulingLimit

#: So far back the drift is looked at, in minutes of their mean, and no further ahead than back (our own choice).
LOOK_BACK_S: Final = 3 * 3600


@dataclass(frozen=True, slots=True)
class LimitAhead:
    """A limit of the run and the time to it."""

    ruling: RulingLimit
    ahead: TimeToLimit


def limits_ahead(rulings: list[RulingLimit], now_us: int) -> list[LimitAhead]:
    """Time to each ER and angle limit that rules now, from minutes of the last hours; other quantities have no such forecast."""
    minute = now_us // (60 * US_PER_S)
    return [
        LimitAhead(one, _ahead(one.limit.tap_id, one.limit.quantity, one.version.alarm, minute))
        for one in rulings
        if one.limit.quantity in (Quantity.ER_DB, Quantity.ANGLE_DEG)
    ]


@lru_cache(maxsize=512)
def _ahead(tap_id: int, quantity: str, alarm: float, minute: int) -> TimeToLimit:
    """Worked out once a minute, however many pages are open: a level that turns back takes a third of a second."""
    end_us = minute * 60 * US_PER_S
    begin_us = end_us - LOOK_BACK_S * US_PER_S
    curve = history(tap_id, quantity, begin_us, end_us, LOOK_BACK_S // 60)
    at_s = (curve.at_us - begin_us) / US_PER_S
    value = np.where(curve.trusted_share >= 0.5, curve.mean, np.nan)
    ask = time_to_er_limit if quantity == Quantity.ER_DB else time_to_limit
    known = np.flatnonzero(np.isfinite(value))
    horizon_s = float(at_s[known[-1]] - at_s[known[0]]) if len(known) > 1 else 60.0
    return ask(at_s, value, alarm, horizon_s=max(horizon_s, 60.0), sampling_s=curve.bucket_s)
