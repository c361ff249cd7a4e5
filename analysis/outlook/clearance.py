"""Clearance: will a bench stay within its limit for the length of a run that starts now?

labmon says what past windows would have done from today's state. It advises a person; it sets and drives nothing.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from analysis.outlook.binomial import LEVEL, failure_bound, windows_needed
from analysis.outlook.comparable import Comparable, SetAside, Widening, comparable_windows
from analysis.outlook.paths import Paths, gather_paths
from analysis.outlook.replay import Replays, replay_angles, replay_sops
from analysis.outlook.survival import time_quantile_s
from analysis.outlook.verdict import CLEARED_WINDOWS, FAILURE_BOUND, Reason, Verdict, failures_borne, verdict_of
from analysis.outlook.window import PastWindow, PlannedRun, StartReading
from analysis.quantities import US_PER_S, FloatArray, angle_between_rad


@dataclass(frozen=True, slots=True, kw_only=True)
class FailedWindow:
    """A window that would have failed from today's state.

    Attributes:
        start_us: Its start. crossed_at_us, failed_at_us: When it first went beyond the limit, and when it had used up the
            allowed seconds, in its own time, µs.
        beyond_s: Seconds beyond the limit. worst_rad: Largest replayed angle, rad.
        labels: Names of what was known of that stretch (cause, logbook), for *why*; empty: nobody knows.
    """

    start_us: int
    crossed_at_us: int
    failed_at_us: int
    beyond_s: float
    worst_rad: float
    labels: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Remedy:
    """What would change the verdict to *cleared*, all else as it is; NaN or None where nothing of that kind would.

    Attributes:
        further_windows: Comparable windows still to come, none of them failing.
        limit_rad: Tightest limit that these windows would clear, rad (with no second beyond it).
        length_s: Longest run that they would clear, s.
    """

    further_windows: int | None
    limit_rad: float
    length_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Clearance:
    """The answer, with all it rests on.

    Attributes:
        verdict, reasons: The word, and why it is no better.
        held, count: k of N comparable windows that would have held. share: k/N, NaN for N = 0.
        failure_bound: One-sided 95 % upper bound on the chance of failure.
        median_s, tenth_s: Times by which half and a tenth of the replays had reached the limit, s; inf: not within the run.
        trusted_share: Smallest share of judged time among the windows that count; NaN for N = 0.
        counted: Starts of the windows that count, µs, oldest first. failed: Those that failed, oldest first.
        widened: How the kind was widened to find these.
        set_aside: Starts of windows that do not count, µs, with the reason. open_causes: As given.
        remedy: What would change it.
    """

    verdict: Verdict
    reasons: tuple[Reason, ...]
    held: int
    count: int
    share: float
    failure_bound: float
    median_s: float
    tenth_s: float
    trusted_share: float
    counted: tuple[int, ...]
    failed: tuple[FailedWindow, ...]
    widened: tuple[Widening, ...]
    set_aside: tuple[tuple[int, SetAside], ...]
    open_causes: tuple[str, ...]
    remedy: Remedy


def clear_angle_run(windows: Sequence[PastWindow] | Paths, run: PlannedRun, now: StartReading, limit_rad: float) -> Clearance:
    """Clearance of a two-port bench.

    Args:
        windows: Its past windows of angles, any number, any order; or the same gathered with ``length_s=run.length_s``.
        run: What is planned. now: Today's angle, rad in [0, π], and what is known against it.
        limit_rad: The limit's angle on the sphere, rad (an ER limit: `analysis.quantities.angle_rad_from_er_db`).
    Returns:
        `Clearance`. Two ports know no direction, so that the share is slightly overconfident; NaN of today's angle counts as
        an untrusted reading.
    Raises:
        ValueError: Windows hold Stokes vectors; the limit is outside (0, π].
    Source: docs/formulas.md, F-90, F-91, F-93, F-94.
    """
    angle_rad = float(np.asarray(now.state))
    return _clearance(windows, run, now, angle_rad, limit_rad,
                      lambda paths: replay_angles(paths, angle_rad, limit_rad, allowed_s=run.allowed_s))


def clear_sop_run(windows: Sequence[PastWindow] | Paths, run: PlannedRun, now: StartReading, limit_rad: float, *,
                  wanted: FloatArray) -> Clearance:
    """Clearance of a Stokes bench: as `clear_angle_run`, with states (shape (3,)) for angles. Source: F-90 to F-92, F-94."""
    sop = np.asarray(now.state, np.float64)
    angle_rad = float(angle_between_rad(sop, np.asarray(wanted, np.float64)))
    return _clearance(windows, run, now, angle_rad, limit_rad,
                      lambda paths: replay_sops(paths, sop, wanted, limit_rad, allowed_s=run.allowed_s))


def _clearance(windows: Sequence[PastWindow] | Paths, run: PlannedRun, now: StartReading, angle_now_rad: float, limit_rad: float,
               replay: Callable[[Paths], Replays]) -> Clearance:
    paths = windows if isinstance(windows, Paths) else gather_paths(windows, run.length_s) if len(windows) else None
    if paths is None or not np.isfinite(angle_now_rad):
        return _nothing(run, now, has_windows=paths is not None)
    replays = replay(paths)
    chosen = comparable_windows(paths, run, replays.has_failed)
    index = chosen.index
    count, failed = len(index), int(replays.has_failed[index].sum())
    reasons = _reasons(paths, chosen, run, now, failed, angle_now_rad > limit_rad)
    quantiles = [time_quantile_s(replays.to_limit_s[index], replays.followed_s[index], share) for share in (0.5, 0.1)]
    return Clearance(
        verdict=verdict_of(failed, count, frozenset(reasons)), reasons=reasons, held=count - failed, count=count,
        share=(count - failed) / count if count else float("nan"), failure_bound=float(failure_bound(failed, count, level=LEVEL)),
        median_s=quantiles[0], tenth_s=quantiles[1],
        trusted_share=float(paths.trusted_share[index].min()) if count else float("nan"),
        counted=tuple(paths.windows[number].start_us for number in index),
        failed=tuple(_failed_window(paths.windows[number], replays, number) for number in index if replays.has_failed[number]),
        widened=chosen.widened, set_aside=tuple((paths.windows[number].start_us, why) for number, why in chosen.set_aside),
        open_causes=now.open_causes, remedy=_remedy(replays, chosen, run.length_s, failed, count))


def _nothing(run: PlannedRun, now: StartReading, *, has_windows: bool) -> Clearance:
    """The answer where there is no window, or no state to replay from."""
    reasons = {Reason.FEW_WINDOWS: not has_windows, Reason.READING_UNTRUSTED: has_windows or not now.is_trusted,
               Reason.CHANGED: run.changed_at_us is not None and not has_windows, Reason.OPEN_CAUSE: bool(now.open_causes)}
    none = float("nan")
    return Clearance(verdict=Verdict.NOT_ENOUGH, reasons=tuple(reason for reason, holds in reasons.items() if holds), held=0,
                     count=0, share=none, failure_bound=1.0, median_s=none, tenth_s=none, trusted_share=none, counted=(),
                     failed=(), widened=(), set_aside=(), open_causes=now.open_causes,
                     remedy=Remedy(further_windows=None if has_windows else CLEARED_WINDOWS, limit_rad=none, length_s=none))


def _reasons(paths: Paths, chosen: Comparable, run: PlannedRun, now: StartReading, failed: int,
             is_beyond: bool) -> tuple[Reason, ...]:
    count = len(chosen.index)
    is_few = verdict_of(0, count) is Verdict.NOT_ENOUGH
    was_cut = any(why is SetAside.OLD_CONFIGURATION for _, why in chosen.set_aside)
    holds = {
        Reason.FEW_WINDOWS: is_few, Reason.CHANGED: is_few and was_cut, Reason.LENGTH_UNSEEN: not chosen.has_length,
        Reason.HOUR_UNSEEN: count > 0 and not chosen.has_near_hour,
        Reason.TEMPERATURE_UNSEEN: _is_temperature_unseen(paths, chosen, run), Reason.READING_UNTRUSTED: not now.is_trusted,
        Reason.AT_FLOOR: now.is_at_floor, Reason.FAILED: failed > 0 and failed > failures_borne(count),
        Reason.THIN: not is_few and count < CLEARED_WINDOWS, Reason.OPEN_CAUSE: bool(now.open_causes),
        Reason.BEYOND_NOW: is_beyond,
    }
    return tuple(reason for reason, is_so in holds.items() if is_so)


def _is_temperature_unseen(paths: Paths, chosen: Comparable, run: PlannedRun) -> bool:
    """The room is now colder or warmer than in any window that counts; unknown temperatures say nothing."""
    ranges = [paths.windows[number].temperature_k for number in chosen.index]
    known = np.array([pair for pair in ranges if pair is not None])
    return bool(run.temperature_k is not None and len(known)
                and not known[:, 0].min() <= run.temperature_k <= known[:, 1].max())


def _failed_window(window: PastWindow, replays: Replays, number: int) -> FailedWindow:
    crossed_us, failed_us = (window.start_us + round(float(after_s[number]) * US_PER_S)
                             for after_s in (replays.to_limit_s, replays.fails_after_s))
    labels = [span.label for span in window.labels if span.start_us <= failed_us and span.end_us >= crossed_us]
    return FailedWindow(start_us=window.start_us, crossed_at_us=crossed_us, failed_at_us=failed_us,
                        beyond_s=float(replays.beyond_s[number]), worst_rad=float(replays.worst_rad[number]),
                        labels=tuple(dict.fromkeys(labels)))


def _remedy(replays: Replays, chosen: Comparable, length_s: float, failed: int, count: int) -> Remedy:
    needed = max(CLEARED_WINDOWS, windows_needed(failed, bound=FAILURE_BOUND))
    borne = failures_borne(count)
    if borne < 0:
        return Remedy(further_windows=needed - count, limit_rad=float("nan"), length_s=float("nan"))
    worst_rad = np.sort(replays.worst_rad[chosen.index])[::-1]
    fails_s = np.sort(np.nan_to_num(replays.fails_after_s[chosen.index], nan=np.inf))
    return Remedy(further_windows=max(0, needed - count), limit_rad=float(worst_rad[borne]),
                  length_s=min(length_s, float(fails_s[borne])))
