"""The untrusted-reading fold: readings come, but may not be judged for too long."""

from dataclasses import dataclass, field
from enum import StrEnum
from typing import Any

from analysis.judge.fold import holds_us
from analysis.judge.seconds import Seconds
from analysis.judge.timer import Timer
from analysis.quantities import US_PER_S, FloatArray


@dataclass(frozen=True, slots=True, kw_only=True)
class UntrustedRule:
    """Raise after ``on_delay_s`` of untrusted seconds, return after ``off_delay_s`` of judged ones."""

    on_delay_s: float = 60.0
    off_delay_s: float = 10.0


class UntrustedKind(StrEnum):
    RAISED = "raised"
    RETURNED = "returned"


@dataclass(frozen=True, slots=True)
class UntrustedEvent:
    """``began_us``: first untrusted second (raised), or first judged one of the stretch that ended it (returned)."""

    kind: UntrustedKind
    at_us: int
    began_us: int


@dataclass(slots=True)
class UntrustedState:
    """Where the fold stands; JSON-able."""

    is_open: bool = False
    bad_timer: Timer = field(default_factory=Timer)
    good_timer: Timer = field(default_factory=Timer)

    def as_json(self) -> dict[str, Any]:
        return {"is_open": self.is_open, "bad": self.bad_timer.as_json(), "good": self.good_timer.as_json()}

    @classmethod
    def from_json(cls, values: dict[str, Any]) -> "UntrustedState":
        return cls(values["is_open"], Timer.from_json(values["bad"]), Timer.from_json(values["good"]))


def fold_untrusted(
    rule: UntrustedRule, state: UntrustedState, seconds: Seconds, interval_s: FloatArray | float
) -> tuple[UntrustedState, list[UntrustedEvent]]:
    """Fold seconds (or plain samples) that follow ``state``; a bound that cannot decide is not untrusted.

    A break of more than three intervals restarts the delays and leaves an open alarm open: silence has its own alarm.
    Cutting ``seconds`` anywhere gives the same.
    """
    state = UntrustedState.from_json(state.as_json())
    events: list[UntrustedEvent] = []
    longest_us = holds_us(seconds, interval_s)
    on_us, off_us = round(rule.on_delay_s * US_PER_S), round(rule.off_delay_s * US_PER_S)
    if not state.is_open and not state.bad_timer.is_running and seconds.is_judged.all():
        return state, events
    for at_us, is_judged, hold_us in zip(seconds.at_us.tolist(), seconds.is_judged.tolist(), longest_us, strict=True):
        if not state.is_open:
            timer = state.bad_timer
            held_us = timer.step(at_us, not is_judged, hold_us)
            if held_us is not None and held_us >= on_us:
                events.append(UntrustedEvent(UntrustedKind.RAISED, at_us, _first(timer)))
                state.is_open = True
                timer.reset()
        else:
            timer = state.good_timer
            held_us = timer.step(at_us, is_judged, hold_us)
            if held_us is not None and held_us >= off_us:
                events.append(UntrustedEvent(UntrustedKind.RETURNED, at_us, _first(timer)))
                state.is_open = False
                timer.reset()
    return state, events


def _first(timer: Timer) -> int:
    assert timer.first_us is not None
    return timer.first_us
