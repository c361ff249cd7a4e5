"""The alarm fold: judged seconds to episodes, live and in replay alike.

What it does with warnings, gaps and bounds is written down in docs/decisions/0005-fold.md.
"""

from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from enum import StrEnum
from typing import Any

import numpy as np

from analysis.judge.rule import LimitRule
from analysis.judge.seconds import Seconds, Status, statuses
from analysis.judge.timer import Timer
from analysis.quantities import US_PER_S, FloatArray

HOLD_INTERVALS = 3.0
_BELOW, _INSIDE = bytes([Status.BELOW]), bytes([Status.INSIDE])


class Level(StrEnum):
    WARNING = "warning"
    ALARM = "alarm"


class EventKind(StrEnum):
    RAISED = "raised"
    ROSE = "rose"
    RETURNED = "returned"


@dataclass(frozen=True, slots=True)
class Event:
    """A change that the fold found.

    Attributes:
        at_us: Data time of the sample at which it was found (the delay is over).
        began_us: First sample of the excursion (raised, rose) or of the good stretch (returned).
        value: The worst value of that second, or the bound where there is only a bound; in the quantity's unit.
    """

    kind: EventKind
    level: Level
    at_us: int
    began_us: int
    value: float


@dataclass(slots=True)
class FoldState:
    """Where a fold stands between two seconds: enough to go on from. JSON-able, so it is the checkpoint too.

    Attributes:
        at_us: The last second folded, None before the first.
        level: Of the open episode, None while none is open.
        began_us, raised_us: First sample and raising sample of the open episode.
    """

    at_us: int | None = None
    level: Level | None = None
    began_us: int | None = None
    raised_us: int | None = None
    alarm_timer: Timer = field(default_factory=Timer)
    warning_timer: Timer = field(default_factory=Timer)
    clear_timer: Timer = field(default_factory=Timer)

    def as_json(self) -> dict[str, Any]:
        return {
            "at_us": self.at_us,
            "level": self.level and self.level.value,
            "began_us": self.began_us,
            "raised_us": self.raised_us,
            "alarm": self.alarm_timer.as_json(),
            "warning": self.warning_timer.as_json(),
            "clear": self.clear_timer.as_json(),
        }

    @classmethod
    def from_json(cls, values: dict[str, Any]) -> "FoldState":
        level = values["level"]
        return cls(
            values["at_us"],
            Level(level) if level else None,
            values["began_us"],
            values["raised_us"],
            Timer.from_json(values["alarm"]),
            Timer.from_json(values["warning"]),
            Timer.from_json(values["clear"]),
        )

    def copy(self) -> "FoldState":
        timers = (replace(timer) for timer in (self.alarm_timer, self.warning_timer, self.clear_timer))
        return FoldState(self.at_us, self.level, self.began_us, self.raised_us, *timers)


def start_state(before: FoldState | None = None) -> FoldState:
    """State at the start of a fold; with ``before``, of the fold that takes over after a change of the limit.

    An open episode goes on until it is clear under the new limit; the delays start anew.
    """
    if before is None:
        return FoldState()
    return FoldState(before.at_us, before.level, before.began_us, before.raised_us)


def is_idle(state: FoldState) -> bool:
    """True where nothing is open and no delay is running: seconds that are not below change nothing then."""
    return state.level is None and state.alarm_timer.first_us is None and state.warning_timer.first_us is None


def fold(rule: LimitRule, state: FoldState, seconds: Seconds, interval_s: FloatArray | float) -> tuple[FoldState, list[Event]]:
    """Fold seconds (or plain samples) that follow ``state``.

    Args:
        rule: The limit in force for all of them; its quantity must be that of ``seconds``.
        state: Left unchanged.
        interval_s: The tap's nominal interval between readings, s, one or one per entry (NaN: not known, counts as none):
            breaks of up to three of them do not reset a delay (of three entries, where those are longer).
    Returns:
        The state after the last second, and the events in order of time. Cutting ``seconds`` anywhere and folding the
        parts one after the other gives the same.
    """
    if seconds.quantity is not rule.quantity:
        raise ValueError(f"seconds are of {seconds.quantity.value}, the rule is for {rule.quantity.value}.")
    step = _Step(rule, state.copy())
    if len(seconds):
        step.run(seconds, holds_us(seconds, interval_s))
    return step.state, step.events


def holds_us(seconds: Seconds, interval_s: FloatArray | float) -> list[int]:
    """Longest break before each entry that does not reset a delay, µs; an unknown interval (NaN) counts as none."""
    count = len(seconds)
    if np.ndim(interval_s) == 0:
        longest_s = max(seconds.entry_s, float(interval_s))  # max keeps the first where the other is NaN
        return [round(HOLD_INTERVALS * longest_s * US_PER_S)] * count
    longest_s = HOLD_INTERVALS * np.fmax(interval_s, seconds.entry_s)
    return np.round(longest_s * US_PER_S).astype(np.int64).tolist()


class _Step:
    """One run of the fold over an array of seconds."""

    def __init__(self, rule: LimitRule, state: FoldState) -> None:
        self.rule, self.state, self.events = rule, state, list[Event]()
        self.on_us, self.off_us = round(rule.on_delay_s * US_PER_S), round(rule.off_delay_s * US_PER_S)
        sign = -1.0 if rule.quantity.is_bad_above else 1.0
        outer = rule.alarm if rule.warning is None else sign * max(sign * rule.alarm, sign * rule.warning)
        self.clear_level = outer + sign * rule.deadband

    def run(self, seconds: Seconds, hold_us: list[int]) -> None:
        at_us, end = seconds.at_us.tolist(), len(seconds)
        to_alarm = _codes(seconds, self.rule.alarm)
        to_warning = to_alarm if self.rule.warning is None else _codes(seconds, self.rule.warning)
        to_clear: bytes | None = None
        position = 0
        while position < end:
            if self.state.level is not None and to_clear is None:
                to_clear = _codes(seconds, self.clear_level)
            position = self._next_interesting(position, end, to_alarm, to_warning, to_clear)
            if position == end:
                break
            at, hold = at_us[position], hold_us[position]
            self._below(at, hold, to_alarm[position], to_warning[position], seconds, position)
            if self.state.level is not None:
                to_clear = _codes(seconds, self.clear_level) if to_clear is None else to_clear
                self._clear(at, hold, to_clear[position], seconds, position)
            position += 1
        self.state.at_us = at_us[-1]

    def _next_interesting(self, position: int, end: int, to_alarm: bytes, to_warning: bytes, to_clear: bytes | None) -> int:
        """The next entry that can start a delay, while none runs; else the very next."""
        state = self.state
        if state.alarm_timer.is_running or state.warning_timer.is_running or state.clear_timer.is_running:
            return position
        starts = [] if to_clear is None or state.level is None else [to_clear.find(_INSIDE, position)]
        if state.level is not Level.ALARM:
            starts.append(to_alarm.find(_BELOW, position))
        if state.level is None:
            starts.append(to_warning.find(_BELOW, position))
        return min((start for start in starts if start >= 0), default=end)

    def _below(self, at_us: int, hold_us: int, to_alarm: int, to_warning: int, seconds: Seconds, position: int) -> None:
        state = self.state
        if state.level is not Level.ALARM:
            held_us = state.alarm_timer.step(at_us, _is(_BELOW[0], to_alarm), hold_us)
            if held_us is not None and held_us >= self.on_us:
                self._raise(Level.ALARM, at_us, state.alarm_timer, _shown(seconds, position))
        if state.level is None and self.rule.warning is not None:
            held_us = state.warning_timer.step(at_us, _is(_BELOW[0], to_warning), hold_us)
            if held_us is not None and held_us >= self.on_us:
                self._raise(Level.WARNING, at_us, state.warning_timer, _shown(seconds, position))

    def _clear(self, at_us: int, hold_us: int, to_clear: int, seconds: Seconds, position: int) -> None:
        held_us = self.state.clear_timer.step(at_us, _is(_INSIDE[0], to_clear), hold_us)
        if held_us is not None and held_us >= self.off_us:
            self._return(at_us, _shown(seconds, position))

    def _raise(self, level: Level, at_us: int, timer: Timer, value: float) -> None:
        state = self.state
        assert timer.first_us is not None
        kind = EventKind.RAISED if state.level is None else EventKind.ROSE
        self.events.append(Event(kind, level, at_us, timer.first_us, value))
        if state.level is None:
            warned_us = state.warning_timer.first_us
            state.began_us = timer.first_us if warned_us is None else min(timer.first_us, warned_us)
            state.raised_us = at_us
        state.level = level
        state.warning_timer.reset()
        if level is Level.ALARM:
            state.alarm_timer.reset()

    def _return(self, at_us: int, value: float) -> None:
        state = self.state
        assert state.level is not None and state.clear_timer.first_us is not None
        self.events.append(Event(EventKind.RETURNED, state.level, at_us, state.clear_timer.first_us, value))
        state.level = state.began_us = state.raised_us = None
        state.clear_timer.reset()
        state.alarm_timer.reset()


def _is(wanted: int, status: int) -> bool | None:
    """Whether a second has the wanted status; None where it cannot tell."""
    return status == wanted if status >= _BELOW[0] else None


def _codes(seconds: Seconds, level: float) -> bytes:
    """`Status` of each second against a level, one byte each, so that long stretches are searched at once."""
    return statuses(seconds, level).tobytes()


def _shown(seconds: Seconds, position: int) -> float:
    return float(seconds.take(slice(position, position + 1)).shown()[0])


@dataclass(frozen=True, slots=True)
class Episode:
    """One excursion from its first bad sample to its return; still open where ``returned_us`` is None.

    Attributes:
        began_us: First sample below; ``raised_us``: when the on-delay was over.
        alarm_us: When it reached the alarm level, None if it stayed a warning.
        good_from_us: First sample of the good stretch that ended it; ``returned_us``: when the off-delay was over.
        level: The highest reached.
    """

    began_us: int
    raised_us: int
    level: Level
    alarm_us: int | None
    good_from_us: int | None
    returned_us: int | None


def episodes_of(events: Iterable[Event]) -> list[Episode]:
    """Episodes of a fold's events, from its start on."""
    episodes: list[Episode] = []
    for event in events:
        if event.kind is EventKind.RAISED:
            alarm_us = event.at_us if event.level is Level.ALARM else None
            episodes.append(Episode(event.began_us, event.at_us, event.level, alarm_us, None, None))
            continue
        if not episodes or episodes[-1].returned_us is not None:
            raise ValueError(
                f"{event.kind.value} at {event.at_us} without an open episode; give the events from the fold's start."
            )
        last = episodes[-1]
        if event.kind is EventKind.ROSE:
            episodes[-1] = Episode(last.began_us, last.raised_us, Level.ALARM, event.at_us, None, None)
        else:
            episodes[-1] = Episode(last.began_us, last.raised_us, last.level, last.alarm_us, event.began_us, event.at_us)
    return episodes
