"""The word said about a planned run, and what speaks against a better one."""

from enum import StrEnum

from analysis.outlook.binomial import failure_bound, failures_allowed

FAILURE_BOUND = 0.20
CLEARED_WINDOWS = 14
FEWEST_WINDOWS = 7


class Verdict(StrEnum):
    """What may be said about a run."""

    CLEARED = "cleared"
    THIN = "likely but thin"
    NOT_CLEARED = "not cleared"
    NOT_ENOUGH = "not enough evidence"


class Reason(StrEnum):
    """Why the verdict is not *cleared*. The first group makes it *not enough evidence* by itself."""

    FEW_WINDOWS = "fewer than 7 comparable windows"
    CHANGED = "configuration changed: what was before does not count"
    LENGTH_UNSEEN = "longer than any window seen"
    HOUR_UNSEEN = "no comparable window starts near this hour"
    TEMPERATURE_UNSEEN = "room temperature outside anything seen"
    READING_UNTRUSTED = "today's reading is not trusted"
    AT_FLOOR = "today's angle is not known: the dark port is at its floor"
    FAILED = "comparable windows would have failed"
    THIN = "fewer than 14 comparable windows"
    OPEN_CAUSE = "a cause is still open"
    BEYOND_NOW = "beyond the limit now"


BLOCKING = frozenset({Reason.FEW_WINDOWS, Reason.LENGTH_UNSEEN, Reason.HOUR_UNSEEN, Reason.TEMPERATURE_UNSEEN,
                      Reason.READING_UNTRUSTED, Reason.AT_FLOOR})


def verdict_of(failed: int, count: int, reasons: frozenset[Reason] = frozenset()) -> Verdict:
    """The verdict on ``failed`` of ``count`` windows.

    Args:
        failed, count: Replays that failed, and replays in all. reasons: What else speaks against the run.
    Returns:
        *Cleared*: N ≥ 14, bound on failure ≤ 20 % at 95 %, nothing against it. *Likely but thin*: 7 ≤ N < 14, none failed,
        nothing against it. *Not enough evidence*: N < 7 or a blocking reason. Else *not cleared*.
    Source: docs/formulas.md, F-91 (the lab's contract).
    """
    if count < FEWEST_WINDOWS or reasons & BLOCKING:
        return Verdict.NOT_ENOUGH
    if reasons & {Reason.OPEN_CAUSE, Reason.BEYOND_NOW}:
        return Verdict.NOT_CLEARED
    if count >= CLEARED_WINDOWS and failure_bound(failed, count) <= FAILURE_BOUND:
        return Verdict.CLEARED
    return Verdict.THIN if count < CLEARED_WINDOWS and failed == 0 else Verdict.NOT_CLEARED


def failures_borne(count: int) -> int:
    """Most failures among ``count`` windows that still clear a run; -1 where none is too many. Source: F-91."""
    return failures_allowed(count, bound=FAILURE_BOUND) if count >= CLEARED_WINDOWS else -1
