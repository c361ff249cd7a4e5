"""Warnings ahead scored on the past: which came true, which were false calls, and which passings were warned of.

Walked forward: a warning rests on minutes before it alone; what came after is only looked at to score it.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.outlook.binomial import proportion_interval
from analysis.quantities import US_PER_S, BoolArray, FloatArray, IntArray

#: Passings so close behind one another are one: light that swings about its limit.
APART_US: Final = 1800 * US_PER_S
#: A warning's outcome is not known where less of its time than this was read.
KNOWN_SHARE: Final = 0.5


@dataclass(frozen=True, slots=True)
class Warned:
    """One warning: when it was raised, when it ended (None: still open), and within what time it said the limit is reached, s."""

    raised_us: int
    ended_us: int | None
    within_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class WarningScore:
    """The sum over a past.

    Attributes:
        warnings: Those whose outcome is known; came_true: the limit was reached within the time that was said.
        open_ended: Warnings whose outcome is not known (too little was read, or their time is not over).
        passings: Times that the limit was passed; warned_of: with a warning open.
        leads_s: From the warning to the passing, s, of those warned of, shape (warned_of,).
    """

    warnings: int
    came_true: int
    open_ended: int
    passings: int
    warned_of: int
    leads_s: FloatArray

    @property
    def false_share(self) -> float:
        """Share of the warnings that did not come true; NaN without a warning."""
        return 1.0 - self.came_true / self.warnings if self.warnings else float("nan")

    @property
    def false_interval(self) -> tuple[float, float]:
        """Its 95 % interval (Clopper–Pearson). Source: docs/formulas.md, F-90."""
        low, high = proportion_interval(self.warnings - self.came_true, self.warnings)
        return float(low), float(high)


def passings_us(minute_us: IntArray, angle_deg: FloatArray, limit_deg: FloatArray) -> IntArray:
    """When the mean angle of a minute went beyond its limit, µs; passings within half an hour of the one before are one.

    Args:
        minute_us: Start of each minute, rising, shape (N,). angle_deg, limit_deg: Shape (N,), NaN where unknown.
    """
    known = np.isfinite(angle_deg) & np.isfinite(limit_deg)
    at_us, is_beyond = minute_us[known], angle_deg[known] > limit_deg[known]
    beyond_us = at_us[is_beyond]
    if not len(beyond_us):
        return beyond_us
    return beyond_us[np.diff(beyond_us, prepend=beyond_us[0] - APART_US - 1) > APART_US]


def score_warnings(warned: Sequence[Warned], passed_us: IntArray, minute_us: IntArray, is_read: BoolArray) -> WarningScore:
    """Score warnings against what came.

    Args:
        warned: In order of time. passed_us: Of `passings_us`.
        minute_us, is_read: Every minute of the past and whether its angle is known, shape (N,).
    """
    end_us = int(minute_us[-1]) + 60 * US_PER_S if len(minute_us) else 0
    came_true = false = open_ended = 0
    for one in warned:
        until_us = one.raised_us + round(one.within_s * US_PER_S)
        if np.any((passed_us > one.raised_us) & (passed_us <= until_us)):
            came_true += 1
        elif until_us > end_us or _read_share(minute_us, is_read, one.raised_us, until_us) < KNOWN_SHARE:
            open_ended += 1
        else:
            false += 1
    leads = [lead for at_us in passed_us.tolist() if (lead := _lead_s(warned, at_us)) is not None]
    return WarningScore(warnings=came_true + false, came_true=came_true, open_ended=open_ended, passings=len(passed_us),
                        warned_of=len(leads), leads_s=np.array(leads))


def _read_share(minute_us: IntArray, is_read: BoolArray, from_us: int, until_us: int) -> float:
    low, high = np.searchsorted(minute_us, [from_us, until_us])
    return float(is_read[low:high].sum()) * 60.0 * US_PER_S / (until_us - from_us)


def _lead_s(warned: Sequence[Warned], passed_us: int) -> float | None:
    for one in warned:
        if one.raised_us < passed_us and (one.ended_us is None or one.ended_us >= passed_us):
            return (passed_us - one.raised_us) / US_PER_S
    return None
