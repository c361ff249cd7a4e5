"""A bench's past minute by minute, and the windows of it that a clearance looks at: one a day, as near the run's hour as it can.

Windows that began hours apart on one day tell of the same weather and the same people: counted by themselves they would make
N look larger than the evidence is. So each day (or every so many days, for longer runs) gives one window.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Final

import numpy as np

from analysis.outlook.comparable import TRUSTED_SHARE
from analysis.outlook.window import LabelledSpan, PastWindow
from analysis.quantities import US_PER_S, BoolArray, FloatArray, IntArray

MINUTE_US: Final = 60 * US_PER_S
DAY_US: Final = 86_400 * US_PER_S
#: Other start hours that are tried, nearest first, for a day whose window at the run's own hour lacks readings.
OFFSETS_H: Final = (0, -1, 1, -2, 2, -3, 3, -4, 4, -6, 6, -9, 9, 12)
#: No more windows, and no more minutes in all, are looked at: bounds of memory and time.
MOST_WINDOWS: Final = 100
MOST_MINUTES: Final = 300_000
#: A room's temperature counts as seen within so much of a window's own range, K (sensors are no better; own choice).
TEMPERATURE_SLACK_K: Final = 0.2


@dataclass(frozen=True, slots=True, eq=False)
class Minutes:
    """M minutes that hold readings.

    Attributes:
        at_us: Their starts, µs since 1970, rising, shape (M,).
        state: Worst angle of the minute from the wanted state, rad, shape (M,); or (Stokes) its mean direction, unit vectors,
            shape (M, 3). NaN where nothing was judged.
        start_state: What a displacement that starts in the minute counts from: mean angle, rad, shape (M,), or the directions.
        judged_s: Seconds with a judged reading, shape (M,). doubtful_s: Of these doubtful ones.
        is_bound: The dark port was at its floor all the minute: the angle is at most this, shape (M,).
        excess_rad: Stokes, shape (M,): see `PastWindow`. None for angles.
    """

    at_us: IntArray
    state: FloatArray
    start_state: FloatArray
    judged_s: FloatArray
    doubtful_s: FloatArray
    is_bound: BoolArray
    excess_rad: FloatArray | None = None

    def __len__(self) -> int:
        return len(self.at_us)


@dataclass(frozen=True, slots=True, eq=False)
class Air:
    """Lowest and highest room temperature, K, of spans of ``span_us`` that start at ``at_us``; shape (K,) each."""

    at_us: IntArray
    low_k: FloatArray
    high_k: FloatArray
    span_us: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Happenings:
    """What people and alarms said of a bench's past, µs.

    Attributes:
        changed_at_us: Configuration changes, rising. realigned_at_us: Moments at which somebody began to align, rising.
        labels: Named stretches.
    """

    changed_at_us: tuple[int, ...] = ()
    realigned_at_us: tuple[int, ...] = ()
    labels: tuple[LabelledSpan, ...] = ()


def day_starts(start_us: int, length_s: float, first_us: int, until_us: int) -> tuple[int, ...]:
    """Starts of the windows that a run's history offers: at its own hour (UTC), not overlapping, over by ``until_us``.

    Args:
        start_us: The run's start; its seconds are left out. length_s: The run's length.
        first_us: No window starts before it. until_us: None ends after it.
    Returns:
        Whole minutes, oldest first, at most `MOST_WINDOWS` and `MOST_MINUTES` in all; the newest are kept.
    """
    length_us = round(length_s * US_PER_S)
    step_us = -(-length_us // DAY_US) * DAY_US
    most = max(min(MOST_WINDOWS, MOST_MINUTES * MINUTE_US // step_us), 1)
    start_us = start_us // MINUTE_US * MINUTE_US
    newest_us = start_us - max(-(-(start_us + length_us - until_us) // DAY_US), 1) * DAY_US
    count = min(max((newest_us - first_us) // step_us + 1, 0), most)
    return tuple(newest_us - number * step_us for number in reversed(range(count)))


def windows_of(minutes: Minutes, starts_us: Sequence[int], length_s: float, limit_rad: float, *,
               happened: Happenings | None = None, air: Air | None = None) -> list[PastWindow]:
    """Windows of a bench's past.

    Args:
        minutes: Its minutes, from twelve hours before the first start to the end of the last window and twelve hours more (or
            as far as there are any).
        starts_us: Of `day_starts`. A day whose window there is judged for less than 95 % gives the next start hour that is.
        length_s: Length of each window, s. limit_rad: A minute at the floor whose bound lies beyond it cannot be told: it is
            not judged.
        happened: What is known of the past. air: Room temperatures.
    Returns:
        One window for each start before which the bench had a reading at all, oldest first.
    Source: docs/formulas.md, F-91.
    """
    happened = happened or Happenings()
    held_s = _held_s(minutes, limit_rad)
    upto_s = np.concatenate([[0.0], np.cumsum(held_s)])
    found = []
    for base_us in starts_us:
        if not len(minutes) or base_us + round(length_s * US_PER_S) <= int(minutes.at_us[0]):
            continue
        start_us = _best_start(minutes, upto_s, base_us, length_s)
        found.append(_window(minutes, held_s, start_us, length_s, happened, air))
    return found


def _held_s(minutes: Minutes, limit_rad: float) -> FloatArray:
    if minutes.state.ndim > 1:
        return minutes.judged_s
    with np.errstate(invalid="ignore"):
        return np.where(minutes.is_bound & (minutes.state > limit_rad), 0.0, minutes.judged_s)


def _best_start(minutes: Minutes, upto_s: FloatArray, base_us: int, length_s: float) -> int:
    """The first of the offered starts that is judged well enough; none: the run's own hour."""
    starts_us = base_us + np.array(OFFSETS_H, np.int64) * (3600 * US_PER_S)
    ends_us = starts_us + round(length_s * US_PER_S)
    first, last = (np.searchsorted(minutes.at_us, one) for one in (starts_us, ends_us))
    is_good = upto_s[last] - upto_s[first] >= TRUSTED_SHARE * length_s
    is_good &= ends_us <= int(minutes.at_us[-1]) + MINUTE_US
    return int(starts_us[np.argmax(is_good)]) if is_good.any() else base_us


def _window(minutes: Minutes, held_s: FloatArray, start_us: int, length_s: float, happened: Happenings,
            air: Air | None) -> PastWindow:
    end_us = start_us + round(length_s * US_PER_S)
    part = slice(*(int(index) for index in np.searchsorted(minutes.at_us, [start_us, end_us])))
    held = held_s[part]
    judged = np.flatnonzero(held > 0.0)
    is_bound = minutes.is_bound[part]
    has_start = len(judged) > 0 and not is_bound[judged[0]]
    return PastWindow(
        start_us=start_us, length_s=length_s, at_us=minutes.at_us[part], state=minutes.state[part], is_trusted=held > 0.0,
        start_hour=hour_of(start_us), is_working_day=is_working_day(start_us), held_s=held,
        start_state=minutes.start_state[part][judged[0]] if has_start else None,
        is_upper_bound=is_bound if minutes.state.ndim == 1 else None,
        cut_at_us=next((one for one in happened.realigned_at_us if start_us < one < end_us), None),
        excess_rad=None if minutes.excess_rad is None else minutes.excess_rad[part],
        temperature_k=_temperature_k(air, start_us, end_us),
        labels=tuple(span for span in happened.labels if span.start_us < end_us and span.end_us >= start_us))


def _temperature_k(air: Air | None, start_us: int, end_us: int) -> tuple[float, float] | None:
    if air is None:
        return None
    inside = (air.at_us + air.span_us > start_us) & (air.at_us < end_us) & np.isfinite(air.low_k) & np.isfinite(air.high_k)
    if not inside.any():
        return None
    return float(air.low_k[inside].min()) - TEMPERATURE_SLACK_K, float(air.high_k[inside].max()) + TEMPERATURE_SLACK_K


def is_working_day(at_us: int) -> bool:
    """Monday to Friday, UTC."""
    return datetime.fromtimestamp(at_us / US_PER_S, UTC).weekday() < 5


def hour_of(at_us: int) -> float:
    """Hour of the day, UTC, [0, 24)."""
    return at_us % DAY_US / 3600e6
