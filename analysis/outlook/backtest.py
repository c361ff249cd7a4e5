"""Back-test: what would have been said before each past window, from earlier ones only, and what came out."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from analysis.outlook.brier import BrierParts, brier_parts, brier_score
from analysis.outlook.clearance import Clearance, clear_angle_run, clear_sop_run
from analysis.outlook.comparable import TRUSTED_SHARE
from analysis.outlook.naive import margin_rule, past_share
from analysis.outlook.paths import Paths, gather_paths
from analysis.outlook.reliability import ReliabilityRow, reliability_table
from analysis.outlook.replay import held_itself
from analysis.outlook.verdict import Verdict
from analysis.outlook.window import PastWindow, PlannedRun, StartReading
from analysis.quantities import FloatArray, angle_between_rad

GO_FROM = 0.9
"""A stated chance from which the naive rules count as go, in the table beside the clearance."""


@dataclass(frozen=True, slots=True, kw_only=True)
class BackTestRow:
    """One past window: what would have been said at its start, and what came out.

    Attributes:
        start_us: Its start. said: The clearance from earlier windows. has_held: What came out.
        margin_forecast, past_forecast: What the two naive rules would have said; NaN: nothing.
        failed_at_us: When it failed, µs; None: it held. labels: What was known of that moment.
    """

    start_us: int
    said: Clearance
    has_held: bool
    margin_forecast: float
    past_forecast: float
    failed_at_us: int | None
    labels: tuple[str, ...]

    def told(self) -> "ToldWindow":
        """What is worth keeping of it."""
        return ToldWindow(
            start_us=self.start_us, verdict=self.said.verdict, held=self.said.held, count=self.said.count, has_held=self.has_held,
            margin_forecast=self.margin_forecast, past_forecast=self.past_forecast, failed_at_us=self.failed_at_us,
            labels=self.labels)


@dataclass(frozen=True, slots=True, kw_only=True)
class ToldWindow:
    """A `BackTestRow` without all that the clearance rests on: its verdict, and k of N."""

    start_us: int
    verdict: Verdict
    held: int
    count: int
    has_held: bool
    margin_forecast: float
    past_forecast: float
    failed_at_us: int | None
    labels: tuple[str, ...]

    @property
    def share(self) -> float:
        """k/N, the chance that was stated; NaN for N = 0."""
        return self.held / self.count if self.count else float("nan")


@dataclass(frozen=True, slots=True, kw_only=True)
class GoRule:
    """How a rule did over the rows judged, taken as a rule to go by.

    Attributes:
        parts: Its Brier score with Murphy's parts. cleared: Rows for which it says go. cleared_held: How many of these held.
    """

    parts: BrierParts
    cleared: int
    cleared_held: int


@dataclass(frozen=True, slots=True, kw_only=True)
class BackTest:
    """The sum of a back-test over the rows for which enough evidence was there.

    Attributes:
        windows: Rows judged. not_told: Rows for which there was *not enough evidence*.
        base_share: Share that held. replay, margin, past: Brier score of each rule over the same rows (NaN: none).
        parts: Murphy's parts of the replay's score. table: What was said and what came out.
        margin_rule, past_rule: The two naive rules (go at 3 dB above the limit; go where 90 % of the past held).
        cleared, cleared_held: Rows *cleared*, and how many of these held. wrong: Rows cleared that failed, oldest first.
    """

    windows: int
    not_told: int
    base_share: float
    replay: float
    margin: float
    past: float
    parts: BrierParts
    margin_rule: GoRule
    past_rule: GoRule
    table: tuple[ReliabilityRow, ...]
    cleared: int
    cleared_held: int
    wrong: tuple[ToldWindow, ...]


def walk_forward_angles(windows: Sequence[PastWindow], limit_rad: float, *, allowed_s: float = 0.0,
                        changed_at_us: Sequence[int] = (), length_s: float | None = None) -> tuple[BackTestRow, ...]:
    """Back-test of a two-port bench.

    Args:
        windows: Its windows, any order. Asked are those that began within the limit (nobody starts a run beyond it), were
            judged for 95 % of their time and not realigned inside.
        limit_rad, allowed_s: Limit, rad, and seconds that a run bears beyond it. changed_at_us: Configuration changes, µs.
        length_s: Length of the runs, s; None: each window's own.
    Returns:
        One row for each window asked, oldest first. Nothing of a window or later is used for what is said before it.
    Source: docs/formulas.md, F-91, F-93, F-109.
    """
    return _walk(windows, None, limit_rad, allowed_s, changed_at_us, length_s,
                 lambda paths, run, now: clear_angle_run(paths, run, now, limit_rad))


def walk_forward_sops(windows: Sequence[PastWindow], limit_rad: float, *, wanted: FloatArray, allowed_s: float = 0.0,
                      changed_at_us: Sequence[int] = (), length_s: float | None = None) -> tuple[BackTestRow, ...]:
    """Back-test of a Stokes bench: as `walk_forward_angles`. Source: docs/formulas.md, F-91, F-92, F-109."""
    return _walk(windows, wanted, limit_rad, allowed_s, changed_at_us, length_s,
                 lambda paths, run, now: clear_sop_run(paths, run, now, limit_rad, wanted=wanted))


def _walk(windows: Sequence[PastWindow], wanted: FloatArray | None, limit_rad: float, allowed_s: float,
          changed_at_us: Sequence[int], length_s: float | None,
          clear: Callable[[Paths, PlannedRun, StartReading], Clearance]) -> tuple[BackTestRow, ...]:
    if not windows:
        return ()
    paths = gather_paths(sorted(windows, key=lambda window: window.start_us), length_s)
    own = held_itself(paths, wanted, limit_rad, allowed_s=allowed_s)
    angle_rad = paths.start if wanted is None else angle_between_rad(paths.start, np.asarray(wanted, np.float64))
    is_asked = (paths.trusted_share >= TRUSTED_SHARE) & (angle_rad <= limit_rad)
    rows = []
    for number, window in enumerate(paths.windows):
        if number == 0 or window.cut_at_us is not None or not is_asked[number]:
            continue
        changes = [at_us for at_us in changed_at_us if at_us <= window.start_us]
        run = PlannedRun(start_us=window.start_us, length_s=length_s or window.length_s, start_hour=window.start_hour,
                         is_working_day=window.is_working_day, air=window.air, allowed_s=allowed_s,
                         changed_at_us=max(changes, default=None))
        earlier = paths.upto(number)
        said = clear(earlier, run, _start_reading(paths, number, limit_rad))
        usable = [one for one in range(number) if earlier.trusted_share[one] >= TRUSTED_SHARE and _is_over(earlier, one, run)]
        has_held = not own.has_failed[number]
        failed_at_us = None if has_held else window.start_us + round(float(own.fails_after_s[number]) * 1e6)
        rows.append(BackTestRow(
            start_us=window.start_us, said=said, has_held=has_held,
            margin_forecast=margin_rule(float(angle_rad[number]), limit_rad),
            past_forecast=past_share(~own.has_failed[usable]), failed_at_us=failed_at_us,
            labels=tuple(span.label for span in window.labels
                         if failed_at_us is not None and span.start_us <= failed_at_us <= span.end_us)))
    return tuple(rows)


def _start_reading(paths: Paths, number: int, limit_rad: float) -> StartReading:
    """A window's own start; at the floor the bound itself, where it is tight enough to be asked about."""
    if not paths.is_start_bound[number]:
        return StartReading(state=paths.start[number])
    judged = np.flatnonzero(paths.held_s[paths.first[number]:paths.first[number + 1]] > 0.0)
    bound_rad = float(paths.state[paths.first[number] + judged[0]])
    return StartReading(state=bound_rad, is_at_floor=bound_rad > limit_rad)


def _is_over(paths: Paths, number: int, run: PlannedRun) -> bool:
    window = paths.windows[number]
    return window.start_us + round(run.length_s * 1e6) <= run.start_us and (
        run.changed_at_us is None or window.start_us >= run.changed_at_us)


def summed_up(rows: Sequence[BackTestRow | ToldWindow]) -> BackTest:
    """Scores and tables of a back-test, of one bench or of a whole lab (rows of several benches together).

    Args:
        rows: Of `walk_forward_angles` or `walk_forward_sops`, whole or only what was `told`.
    Returns:
        `BackTest`. The forecast is the plain share k/N. Source: docs/formulas.md, F-104, F-106.
    """
    all_told = [row.told() if isinstance(row, BackTestRow) else row for row in rows]
    told = [row for row in all_told if row.verdict is not Verdict.NOT_ENOUGH]
    outcome = np.array([row.has_held for row in told], np.float64)
    said = np.array([row.share for row in told], np.float64)
    margin, past = (_go_rule(np.array([getattr(row, f"{name}_forecast") for row in told], np.float64), outcome)
                    for name in ("margin", "past"))
    cleared = [row for row in told if row.verdict is Verdict.CLEARED]
    return BackTest(
        windows=len(told), not_told=len(rows) - len(told), base_share=float(outcome.mean()) if told else float("nan"),
        replay=brier_score(said, outcome), margin=margin.parts.score, past=past.parts.score, parts=brier_parts(said, outcome),
        margin_rule=margin, past_rule=past, table=reliability_table(said, outcome), cleared=len(cleared),
        cleared_held=sum(row.has_held for row in cleared),
        wrong=tuple(sorted((row for row in cleared if not row.has_held), key=lambda row: row.start_us)))


def _go_rule(forecast: FloatArray, outcome: FloatArray) -> GoRule:
    goes = forecast >= GO_FROM
    return GoRule(parts=brier_parts(forecast, outcome), cleared=int(goes.sum()), cleared_held=int(outcome[goes].sum()))
