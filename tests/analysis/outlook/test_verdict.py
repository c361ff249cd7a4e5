"""Verdicts of CONTRACT 5, case by case."""

import pytest

from analysis.outlook.verdict import BLOCKING, Reason, Verdict, failures_borne, verdict_of


@pytest.mark.parametrize(("failed", "count", "verdict"), [
    (0, 0, Verdict.NOT_ENOUGH), (0, 3, Verdict.NOT_ENOUGH), (6, 6, Verdict.NOT_ENOUGH), (0, 7, Verdict.THIN),
    (0, 13, Verdict.THIN), (1, 13, Verdict.NOT_CLEARED), (0, 14, Verdict.CLEARED), (1, 21, Verdict.NOT_CLEARED),
    (1, 22, Verdict.CLEARED), (3, 13, Verdict.NOT_CLEARED), (0, 59, Verdict.CLEARED), (14, 14, Verdict.NOT_CLEARED)])
def test_counts(failed, count, verdict):
    assert verdict_of(failed, count) is verdict


@pytest.mark.parametrize("reason", sorted(BLOCKING))
def test_blocking_reasons_leave_no_evidence(reason):
    assert verdict_of(0, 59, frozenset({reason})) is Verdict.NOT_ENOUGH


@pytest.mark.parametrize("reason", [Reason.OPEN_CAUSE, Reason.BEYOND_NOW])
def test_an_open_cause_clears_nothing(reason):
    assert verdict_of(0, 59, frozenset({reason})) is Verdict.NOT_CLEARED
    assert verdict_of(0, 10, frozenset({reason})) is Verdict.NOT_CLEARED


def test_failures_borne():
    """One from N = 22 on."""
    assert [failures_borne(count) for count in (13, 14, 21, 22)] == [-1, 0, 0, 1]
