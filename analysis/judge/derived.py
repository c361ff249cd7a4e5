"""Derived quantities as the fold takes them: the trusted share, and the time to the limit, from one-minute cells.

They are judged at the end of a minute (share) or of a bin of drift (time to the limit): an entry stands at the last second of it.
Pure; live and replay give the same cells and get the same entries.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.judge.phases import FOREVER_US, Phase
from analysis.judge.rule import Quantity
from analysis.judge.seconds import Seconds
from analysis.outlook.recent_drift import BINS, RecentDrift, recent_drift
from analysis.quantities import US_PER_S, BoolArray, FloatArray, IntArray, angle_rad_from_er_db

MINUTE_US: Final = 60 * US_PER_S
#: Windows that one may choose, s: of a share any whole minutes up to a day, of drift multiples of three hours.
SHARE_WINDOW_S: Final = 600.0
DRIFT_WINDOW_S: Final = 10_800.0
LONGEST_WINDOW_S: Final = 86_400.0


@dataclass(frozen=True, slots=True)
class Minutes:
    """One-minute cells of a tap without holes: N minutes from ``from_us`` on.

    Attributes:
        count: Samples in the minute, 0: nothing was read. trusted_us: Time that samples with a trusted ER held.
        angle_sum, angle_count: Of the usable angles, degrees.
    """

    from_us: int
    count: IntArray
    trusted_us: IntArray
    angle_sum: FloatArray
    angle_count: IntArray

    def __len__(self) -> int:
        return len(self.count)

    @property
    def until_us(self) -> int:
        """Behind the last minute."""
        return self.from_us + len(self) * MINUTE_US

    def angle_deg(self) -> FloatArray:
        """Mean angle of each minute, degrees; NaN where there is none."""
        return _means(self.angle_sum, self.angle_count)


def look_back_us(quantity: Quantity, window_s: float | None) -> int:
    """How far before an entry the minutes that it rests on may lie, µs."""
    if quantity is Quantity.TRUSTED_SHARE:
        return 2 * round((window_s or SHARE_WINDOW_S) * US_PER_S)
    return round((window_s or DRIFT_WINDOW_S) * US_PER_S)


def bin_us(window_s: float | None) -> int:
    """Length of a bin of drift, µs; moments are whole multiples of it."""
    return round((window_s or DRIFT_WINDOW_S) * US_PER_S) // BINS


def share_seconds(minutes: Minutes, window_s: float | None, from_us: int) -> Seconds:
    """Trusted share at the end of each minute that was read, from ``from_us`` on.

    The share of the window's time that trusted samples held; a minute without reading counts as not trusted. A silence as long
    as the window starts it anew (no reading has an alarm of its own): until it is full again nothing is judged.

    Args:
        minutes: From `look_back_us` before ``from_us`` on.
    """
    window = round((window_s or SHARE_WINDOW_S) * US_PER_S) // MINUTE_US
    is_read = minutes.count > 0
    total_us = np.concatenate([[0], np.cumsum(minutes.trusted_us)])
    index = np.arange(len(minutes))
    share = (total_us[index + 1] - total_us[np.maximum(index + 1 - window, 0)]) / (window * MINUTE_US)
    entries = np.flatnonzero(is_read)
    silent = np.diff(entries, prepend=-window - 1) - 1
    starts = np.maximum.accumulate(np.where(silent >= window, entries, 0)) if len(entries) else entries
    is_full = entries - starts + 1 >= window
    at_us = minutes.from_us + (entries + 1) * MINUTE_US - US_PER_S
    return _seconds(Quantity.TRUSTED_SHARE, 60.0, at_us, np.minimum(share[entries], 1.0), is_full, from_us)


def drift_of(minutes: Minutes, window_s: float | None, hosts: Sequence[Sequence[Phase]]) -> tuple[IntArray, RecentDrift]:
    """End of each bin, µs, and what the drift up to it says of the strictest of the hosts' alarm levels then in force.

    Args:
        minutes: Beginning and ending at whole multiples of `bin_us`.
        hosts: Phases of the limits on ER or angle that are run towards.
    """
    length_us = bin_us(window_s)
    per_bin = length_us // MINUTE_US
    angle_deg = _means(*(part.reshape(-1, per_bin).sum(axis=1) for part in (minutes.angle_sum, minutes.angle_count)))
    end_us = minutes.from_us + (np.arange(len(angle_deg)) + 1) * length_us
    return end_us, recent_drift(angle_deg, length_us / US_PER_S, levels_deg(hosts, end_us))


def whole_bins(minutes: Minutes, window_s: float | None) -> Minutes:
    """The part that begins and ends at whole bins of drift."""
    length_us = bin_us(window_s)
    low_us = -(-minutes.from_us // length_us) * length_us
    return _part(minutes, low_us, max(minutes.until_us // length_us * length_us, low_us))


def last_window(minutes: Minutes, window_s: float | None) -> Minutes:
    """The last whole window of drift; minutes before the first are empty."""
    high_us = minutes.until_us // bin_us(window_s) * bin_us(window_s)
    return _part(minutes, high_us - BINS * bin_us(window_s), high_us)


def _part(minutes: Minutes, low_us: int, high_us: int) -> Minutes:
    first, behind = (low_us - minutes.from_us) // MINUTE_US, (high_us - minutes.from_us) // MINUTE_US
    cut, lacking = slice(max(first, 0), max(behind, 0)), max(-first, 0)
    columns = (minutes.count, minutes.trusted_us, minutes.angle_sum, minutes.angle_count)
    return Minutes(low_us, *(np.concatenate([np.zeros(lacking, column.dtype), column[cut]]) for column in columns))


def time_seconds(end_us: IntArray, drift: RecentDrift, window_s: float | None, from_us: int) -> Seconds:
    """Median time to the limit at the end of each bin that can tell, from ``from_us`` on.

    Where the light is beyond its limit nothing is judged: the limit itself calls.
    """
    known = drift.is_known
    is_inside = drift.median_s[known] > 0.0
    return _seconds(Quantity.TIME_TO_LIMIT_S, bin_us(window_s) / US_PER_S, end_us[known] - US_PER_S, drift.median_s[known],
                    is_inside, from_us)


def levels_deg(hosts: Sequence[Sequence[Phase]], at_us: IntArray) -> FloatArray:
    """The smallest alarm angle in force at each moment, degrees, NaN where no host is."""
    levels = np.full(len(at_us), np.inf)
    for phases in hosts:
        for phase in phases:
            if phase.is_retired:
                continue
            is_in = (at_us >= phase.from_us) & (at_us < min(phase.until_us, FOREVER_US))
            levels[is_in] = np.minimum(levels[is_in], level_deg(phase))
    return np.where(np.isfinite(levels), levels, np.nan)


def level_deg(phase: Phase) -> float:
    """A phase's alarm level as an angle, degrees."""
    if phase.rule.quantity is Quantity.ER_DB:
        return float(np.degrees(angle_rad_from_er_db(phase.rule.alarm)))
    return phase.rule.alarm


def _means(total: FloatArray, count: IntArray) -> FloatArray:
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _seconds(
    quantity: Quantity, entry_s: float, at_us: IntArray, value: FloatArray, is_judged: BoolArray, from_us: int
) -> Seconds:
    shown, never = np.where(is_judged, value, np.nan), np.zeros(len(at_us), dtype=bool)
    entries = Seconds(quantity, entry_s, at_us, shown, shown, shown, is_judged, never, np.ones(len(at_us), dtype=np.int64))
    return entries.take(at_us >= from_us)
