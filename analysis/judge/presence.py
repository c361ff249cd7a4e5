"""No reading: judged on the server's clock, and only for time in which the door was up."""

from dataclasses import dataclass
from enum import StrEnum
from typing import Final

import numpy as np

from analysis.quantities import US_PER_S, IntArray

SHOWN_AFTER_INTERVALS: Final = 3.0
CADENCE_COUNT: Final = 20


class Presence(StrEnum):
    PRESENT = "present"
    LATE = "late"
    SILENT = "silent"


def door_time_us(from_us: IntArray | int, until_us: IntArray | int, door_up: IntArray) -> IntArray:
    """Time for which the door was up within half-open spans, µs.

    Args:
        from_us, until_us: Span ends, broadcastable to (M,).
        door_up: Spans in which the door was up, shape (K, 2), sorted, not overlapping.
    """
    up = np.asarray(door_up, dtype=np.int64).reshape(-1, 2)
    lengths = np.concatenate([[0], np.cumsum(up[:, 1] - up[:, 0])])

    def up_until(at_us: IntArray | int) -> IntArray:
        index = np.searchsorted(up[:, 0], at_us, side="right")
        within = np.zeros(np.shape(at_us), dtype=np.int64)
        if len(up):
            last = np.maximum(index - 1, 0)
            within = np.where(index > 0, np.minimum(np.asarray(at_us) - up[last, 1], 0), 0)
        return lengths[index] + within

    return np.maximum(up_until(until_us) - up_until(from_us), 0)


def presences(
    last_arrival_us: IntArray, now_us: int, door_up: IntArray, interval_s: np.ndarray | float, call_after_s: np.ndarray | float
) -> list[Presence]:
    """Presence of M taps: late from 3 intervals of silence on (shown), silent from ``call_after_s`` on (called).

    Args:
        last_arrival_us: Newest arrival of each tap on the server's clock, shape (M,).
        interval_s: Usual time between arrivals, see `cadence_s`; (M,) or one.
    """
    silence_us = door_time_us(np.asarray(last_arrival_us), now_us, door_up)
    shown_us = SHOWN_AFTER_INTERVALS * np.asarray(interval_s) * US_PER_S
    called_us = np.maximum(np.asarray(call_after_s) * US_PER_S, shown_us)
    late, silent = silence_us > shown_us, silence_us >= called_us
    return [
        Presence.SILENT if called else Presence.LATE if shown else Presence.PRESENT
        for called, shown in zip(silent & late, late, strict=True)
    ]


def cadence_s(arrival_us: IntArray, declared_s: float | None = None) -> float | None:
    """Usual time between a tap's arrivals, s: the declared interval or the median of recent arrivals, whichever is longer.

    A station that sends batches arrives less often than it measures. None where neither is known.
    """
    recent = np.unique(np.asarray(arrival_us)[-CADENCE_COUNT:])
    median_s = float(np.median(np.diff(recent))) / US_PER_S if len(recent) > 1 else None
    known = [value for value in (declared_s, median_s) if value is not None]
    return max(known) if known else None


@dataclass(frozen=True, slots=True)
class Silence:
    """A stretch without arrivals: ``shown_us`` at 3 intervals, ``called_us`` if it lasted; open where ``ended_us`` is None."""

    last_heard_us: int
    shown_us: int
    called_us: int | None
    ended_us: int | None


def silences(arrival_us: IntArray, until_us: int, door_up: IntArray, interval_s: float, call_after_s: float) -> list[Silence]:
    """All silences of one tap, replayed from its stored arrivals (sorted, shape (N,)) up to ``until_us``."""
    arrival_us = np.asarray(arrival_us, dtype=np.int64)
    if not len(arrival_us):
        return []
    shown_us = round(SHOWN_AFTER_INTERVALS * interval_s * US_PER_S)
    called_us = max(round(call_after_s * US_PER_S), shown_us)
    ends = np.append(arrival_us[1:], until_us)
    quiet_us = door_time_us(arrival_us, ends, door_up)
    found = []
    for index in np.flatnonzero(quiet_us > shown_us).tolist():
        start = int(arrival_us[index])
        called = _when_up_for(start, called_us, door_up) if quiet_us[index] >= called_us else None
        ended = int(ends[index]) if index + 1 < len(arrival_us) else None
        found.append(Silence(start, _when_up_for(start, shown_us, door_up), called, ended))
    return found


def _when_up_for(from_us: int, duration_us: int, door_up: IntArray) -> int:
    """Moment at which the door has been up for a duration since ``from_us``; the duration is known to be reached."""
    left_us = duration_us
    for start_us, end_us in np.asarray(door_up, dtype=np.int64).reshape(-1, 2).tolist():
        begin_us = max(start_us, from_us)
        if end_us <= begin_us:
            continue
        if end_us - begin_us >= left_us:
            return begin_us + left_us
        left_us -= end_us - begin_us
    raise ValueError(f"the door was not up for {duration_us} us after {from_us}.")
