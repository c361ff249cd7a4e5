"""A proposed limit replayed over the past by the very fold that judges live: raw seconds only where the limit is near.

Pure: whoever asks gives the worst values of coarse cells, and a way to get the seconds of a span.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.judge.fold import Episode, Event, FoldState, episodes_of, fold, is_idle
from analysis.judge.rule import LimitRule
from analysis.judge.seconds import Seconds, Status, statuses
from analysis.quantities import US_PER_S, FloatArray, IntArray

#: Cells are kept in single precision: one this close to the level, relative to it, is looked at in full.
NEAR_SHARE: Final = 1e-3
#: So long a span is read at a time; four times as long as before where the next is near too, up to `LONGEST_STEP_US`.
STEP_US: Final = 3600 * US_PER_S
LONGEST_STEP_US: Final = 4 * 86_400 * US_PER_S


@dataclass(frozen=True, slots=True)
class Call:
    """One episode that the proposed limit would have raised.

    Attributes:
        raised_us: When the on-delay was over; ``returned_us``: None if still open at the span's end.
        alarm_us: When it reached the alarm level, None if it stayed a warning.
        lead_s: From the call to the first second beyond the hard level while it was open, s; None where that never came or
            no hard level was given, negative where the call would have come too late.
    """

    raised_us: int
    returned_us: int | None
    alarm_us: int | None
    lead_s: float | None


@dataclass(frozen=True, slots=True)
class Rehearsal:
    """``calls`` in order of time; ``read_us``: how much of the span was folded from raw seconds, µs."""

    calls: list[Call]
    read_us: int


def rehearse(
    rule: LimitRule,
    cell_at_us: IntArray,
    cell_worst: FloatArray,
    cell_us: int,
    until_us: int,
    seconds_of_span: Callable[[int, int], Seconds],
    *,
    interval_s: float,
    hard: float | None = None,
) -> Rehearsal:
    """What the limit would have raised.

    A fold in which nothing is open and no delay runs is not changed by seconds of which none is beyond the outer level, so
    leaving those out gives exactly the episodes of the whole fold.

    Args:
        cell_at_us, cell_worst: Start (rising, whole seconds) and worst usable value of each cell of ``cell_us``, shape (N,); NaN
            where nothing was judged, ±inf on the bad side where a cell must be looked at in full.
        seconds_of_span: Seconds of a half-open span, µs.
        interval_s: The tap's nominal interval, s. ``hard``: the level that lead times are measured to, in the quantity's unit.
    """
    near_us = cell_at_us[_is_near(rule, cell_worst)]
    state, position = FoldState(), int(cell_at_us[0]) if len(cell_at_us) else until_us
    events: list[Event] = []
    hard_us: list[int] = []
    read_us = index = 0
    step_us = STEP_US
    while index < len(near_us) or (position < until_us and not is_idle(state)):
        start = max(int(near_us[index]), position) if is_idle(state) else position
        step_us = min(4 * step_us, LONGEST_STEP_US) if read_us and start - position < STEP_US else STEP_US
        position = start
        end_us = min(position + step_us, until_us)
        index = max(int(np.searchsorted(near_us, end_us - cell_us, side="right")), index)
        if end_us <= position:
            break
        seconds = seconds_of_span(position, end_us)
        state, found = fold(rule, state, seconds, interval_s)
        events += found
        if hard is not None and len(seconds):
            hard_us += seconds.at_us[statuses(seconds, hard) == Status.BELOW].tolist()
        read_us += end_us - position
        position = end_us
    return Rehearsal([_call(one, hard_us) for one in episodes_of(events)], read_us)


def _is_near(rule: LimitRule, worst: FloatArray) -> np.ndarray:
    """True where a cell may hold a second beyond the outer level."""
    outer = rule.alarm if rule.warning is None else rule.warning
    reach = NEAR_SHARE * abs(outer)
    with np.errstate(invalid="ignore"):
        return worst > outer - reach if rule.quantity.is_bad_above else worst < outer + reach


def _call(episode: Episode, hard_us: list[int]) -> Call:
    times = np.asarray(hard_us, dtype=np.int64)
    end_us = episode.returned_us if episode.returned_us is not None else np.iinfo(np.int64).max
    inside = times[(times >= episode.began_us) & (times < end_us)]
    lead_s = float(inside[0] - episode.raised_us) / US_PER_S if len(inside) else None
    return Call(episode.raised_us, episode.returned_us, episode.alarm_us, lead_s)
