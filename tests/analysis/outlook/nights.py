"""Hand-made nights: 12 h at one sample a minute, the k-th beginning at 20:00 of day k."""

import numpy as np

from analysis.outlook.window import PastWindow, PlannedRun

DAY_US = 86_400_000_000
MINUTE_US = 60_000_000
START_US = 72_000_000_000
NIGHT_S = 43_200.0


def minutes_us(day: int, count: int = 720) -> np.ndarray:
    """Times of the night's samples."""
    return START_US + day * DAY_US + MINUTE_US * np.arange(count)


def night(day: int, state: np.ndarray, **changes: object) -> PastWindow:
    """Night of a day; day 0 is a Monday."""
    facts = {"start_us": START_US + day * DAY_US, "length_s": NIGHT_S, "at_us": minutes_us(day, len(state)), "state": state,
             "is_trusted": np.ones(len(state), bool), "start_hour": 20.0, "is_working_day": day % 7 < 5}
    return PastWindow(**(facts | changes))


def calm(day: int, angle_deg: float = 3.0, **changes: object) -> PastWindow:
    """A night at one angle."""
    return night(day, np.full(720, np.radians(angle_deg)), **changes)


def bumped(day: int, by_deg: float, first: int, minutes: int, **changes: object) -> PastWindow:
    """A night at 3° that stands ``by_deg`` higher for some minutes."""
    state = np.full(720, np.radians(3.0))
    state[first:first + minutes] += np.radians(by_deg)
    return night(day, state, **changes)


def run_on(day: int, **changes: object) -> PlannedRun:
    """The run planned for the night of a day."""
    facts = {"start_us": START_US + day * DAY_US, "length_s": NIGHT_S, "start_hour": 20.0, "is_working_day": day % 7 < 5}
    return PlannedRun(**(facts | changes))
