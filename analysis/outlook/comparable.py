"""Which past windows may speak for the run that is planned."""

from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from analysis.outlook.paths import Paths
from analysis.outlook.window import PastWindow, PlannedRun
from analysis.quantities import BoolArray, IntArray

NEAR_HOURS = 2.0
WIDER_HOURS = 4.0
ENOUGH_WINDOWS = 7
TRUSTED_SHARE = 0.95


class SetAside(StrEnum):
    """Why a window does not count."""

    NOT_OVER = "not over before the run's start"
    OLD_CONFIGURATION = "before the last configuration change"
    SHORTER = "shorter than the run"
    UNTRUSTED = "less than 95 % trusted"
    REALIGNED = "realigned inside, and within the limit until then"
    OTHER_KIND = "another kind of day, hour or air"
    OVERLAPPING = "overlaps a window that counts"


class Widening(StrEnum):
    """How the kind was widened, because too few windows were of the run's own kind."""

    DAYS = "working days and weekends pooled"
    HOURS = "starts within 4 h pooled"
    ALL_HOURS = "all start hours pooled"
    AIR = "all air regimes pooled"


@dataclass(frozen=True, slots=True, eq=False)
class Comparable:
    """The choice among W windows.

    Attributes:
        index: Windows that count, rising, shape (N,).
        widened: Steps taken to find enough, in order; empty: all are of the run's own kind.
        set_aside: Windows that do not count, by index, with the first reason that holds.
        has_near_hour: One that counts starts within 2 h of the run's hour.
        has_length: Some window of the present configuration is as long as the run (or no window is there at all).
    """

    index: IntArray
    widened: tuple[Widening, ...]
    set_aside: tuple[tuple[int, SetAside], ...]
    has_near_hour: bool
    has_length: bool


def comparable_windows(paths: Paths, run: PlannedRun, has_failed: BoolArray) -> Comparable:
    """Choose the windows that resemble a run; widen the kind step by step while fewer than 7 are found.

    Args:
        paths: The windows, gathered with ``length_s=run.length_s``.
        run: The run.
        has_failed: Replays that failed, shape (W,). A window cut by a realignment counts only if it had failed before: what
            it would have done later is not known. (This errs to the safe side, for people realign what drifts.)
    Returns:
        `Comparable`; no two of its windows overlap, the nearest kind and then the newest first.
    Source: docs/formulas.md, F-91.
    """
    reasons: dict[int, SetAside] = {}
    for number, window in enumerate(paths.windows):
        reason = _unusable(window, run, float(paths.trusted_share[number]), bool(has_failed[number]))
        if reason is not None:
            reasons[number] = reason
    usable = [number for number in range(len(paths.windows)) if number not in reasons]
    chosen, overlapping, widened = _widened(paths.windows, usable, run)
    for number in usable:
        if number not in chosen:
            reasons[number] = SetAside.OVERLAPPING if number in overlapping else SetAside.OTHER_KIND
    present = [window for window in paths.windows if not _is_old(window, run) and window.end_us <= run.start_us]
    return Comparable(np.array(sorted(chosen), np.int64), widened, tuple(sorted(reasons.items())),
                      any(_hours_apart(paths.windows[number], run) <= NEAR_HOURS for number in chosen),
                      not present or any(window.length_s >= run.length_s for window in present))


def _unusable(window: PastWindow, run: PlannedRun, trusted_share: float, has_failed: bool) -> SetAside | None:
    if window.start_us + round(run.length_s * 1e6) > run.start_us:
        return SetAside.NOT_OVER
    if _is_old(window, run):
        return SetAside.OLD_CONFIGURATION
    if window.length_s < run.length_s:
        return SetAside.SHORTER
    if trusted_share < TRUSTED_SHARE:
        return SetAside.UNTRUSTED
    is_cut = window.cut_at_us is not None and window.cut_at_us < window.start_us + round(run.length_s * 1e6)
    return SetAside.REALIGNED if is_cut and not has_failed else None


def _is_old(window: PastWindow, run: PlannedRun) -> bool:
    return run.changed_at_us is not None and window.start_us < run.changed_at_us


def _hours_apart(window: PastWindow, run: PlannedRun) -> float:
    return abs((window.start_hour - run.start_hour + 12.0) % 24.0 - 12.0)


def _widened(windows: tuple[PastWindow, ...], usable: list[int],
             run: PlannedRun) -> tuple[set[int], set[int], tuple[Widening, ...]]:
    """Windows that count, those that overlap them, and the steps that were needed and of use."""
    chosen: set[int] = set()
    overlapping: set[int] = set()
    widened: list[Widening] = []
    for step in (None, *Widening):
        before = len(chosen)
        for number in sorted(usable, key=lambda one: -windows[one].start_us):
            if number in chosen or number in overlapping or not _is_of_kind(windows[number], run, step):
                continue
            is_apart = all(abs(windows[number].start_us - windows[one].start_us) >= run.length_s * 1e6 for one in chosen)
            (chosen if is_apart else overlapping).add(number)
        if step is not None and len(chosen) > before:
            widened.append(step)
        if len(chosen) >= ENOUGH_WINDOWS or len(chosen) + len(overlapping) == len(usable):
            break
    return chosen, overlapping, tuple(widened)


def _is_of_kind(window: PastWindow, run: PlannedRun, step: Widening | None) -> bool:
    """Each step keeps what the steps before it gave up."""
    reached = 0 if step is None else 1 + list(Widening).index(step)
    hours = NEAR_HOURS if reached < 2 else WIDER_HOURS if reached < 3 else 12.0
    return (_hours_apart(window, run) <= hours and (reached >= 1 or window.is_working_day == run.is_working_day)
            and (reached >= 4 or window.air == run.air))
