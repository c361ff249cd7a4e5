"""Several limits of one experiment: a run holds only where all of them hold, so windows are counted together."""

from collections.abc import Sequence
from dataclasses import dataclass

from analysis.outlook.binomial import failure_bound, windows_needed
from analysis.outlook.clearance import Clearance
from analysis.outlook.verdict import CLEARED_WINDOWS, FAILURE_BOUND, Reason, Verdict, failures_borne, verdict_of


@dataclass(frozen=True, slots=True, kw_only=True)
class Together:
    """The answer for an experiment; members as of `Clearance`.

    Attributes:
        further_windows: Comparable windows still to come, none of them failing, that would clear it; None: no number of them.
    """

    verdict: Verdict
    reasons: tuple[Reason, ...]
    held: int
    count: int
    share: float
    failure_bound: float
    median_s: float
    tenth_s: float
    further_windows: int | None


def cleared_together(clearances: Sequence[Clearance]) -> Together:
    """Count windows in which every limit held.

    Args:
        clearances: Of the experiment's limits for the same run; at least one.
    Returns:
        `Together`. A window counts if it counts for every limit, or failed for one of them: so a failure is never lost, and k of
        N is no better than that of the worst limit. The times to the limit are the smallest of any limit's. What speaks
        against one limit speaks against the run.
    Raises:
        ValueError: No clearance.
    Source: docs/formulas.md, F-91 (own in how windows are joined; errs to the safe side).
    """
    if not clearances:
        raise ValueError("clearances is empty; pass one for each limit.")
    failed = set().union(*({window.start_us for window in one.failed} for one in clearances))
    in_all = set(clearances[0].counted).intersection(*(one.counted for one in clearances[1:]))
    count, failures = len(in_all | failed), len(failed)
    reasons = _reasons(clearances, failures, count)
    is_stuck = any(one.remedy.further_windows is None for one in clearances)
    return Together(
        verdict=verdict_of(failures, count, frozenset(reasons)), reasons=reasons, held=count - failures, count=count,
        share=(count - failures) / count if count else float("nan"), failure_bound=float(failure_bound(failures, count)),
        median_s=min(one.median_s for one in clearances), tenth_s=min(one.tenth_s for one in clearances),
        further_windows=None if is_stuck else max(0, _needed(failures) - count))


def _needed(failures: int) -> int:
    return max(CLEARED_WINDOWS, windows_needed(failures, bound=FAILURE_BOUND))


def _reasons(clearances: Sequence[Clearance], failures: int, count: int) -> tuple[Reason, ...]:
    """Reasons of the limits; those that are about counts by the common counts."""
    own = {reason for one in clearances for reason in one.reasons} - {Reason.FAILED, Reason.THIN, Reason.FEW_WINDOWS}
    is_few = verdict_of(0, count) is Verdict.NOT_ENOUGH
    own |= {reason for reason, is_so in {
        Reason.FEW_WINDOWS: is_few, Reason.THIN: not is_few and count < CLEARED_WINDOWS,
        Reason.FAILED: failures > 0 and failures > failures_borne(count)}.items() if is_so}
    return tuple(reason for reason in Reason if reason in own)
