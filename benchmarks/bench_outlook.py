"""Clearance from 100 nights at one sample a minute, and fits of the time to the limit; the reference is a plain loop over nights.

Wanted: at most 50 ms a clearance, Stokes and two-port. The reference does the replay alone with numpy, one night after the
other: seconds that samples hold, trusted share, worst angle, first crossing, seconds beyond. The clearance also chooses the
nights and forms bounds, quantiles and remedies.
"""

import numpy as np

from analysis.fibre.sphere import turned
from analysis.fibre.way_back import smallest_rotation
from analysis.outlook.backtest import summed_up, walk_forward_angles, walk_forward_sops
from analysis.outlook.clearance import Clearance, clear_angle_run, clear_sop_run
from analysis.outlook.time_to_limit import time_to_limit
from analysis.outlook.window import PastWindow, PlannedRun, StartReading
from analysis.quantities import angle_between_rad
from benchmarks.lab import best_of, row

NIGHTS, MINUTES, ROUNDS = 100, 720, 7
DAY_US, MINUTE_US = 86_400_000_000, 60_000_000
WANTED, LIMIT_RAD = np.array([1.0, 0.0, 0.0]), np.radians(11.42)
NOW = np.array([1.0, 0.05, 0.02]) / np.linalg.norm([1.0, 0.05, 0.02])
RUN = PlannedRun(start_us=NIGHTS * DAY_US, length_s=43_200.0, start_hour=20.0, is_working_day=True)


def invented_nights(seed: int = 1) -> list[np.ndarray]:
    """Stokes paths that wander and swing, shape (720, 3) each."""
    random = np.random.default_rng(seed)
    swing = 0.03 * np.sin(2 * np.pi * np.arange(MINUTES) / 22.0)
    paths = []
    for _ in range(NIGHTS):
        path = np.cumsum(random.normal(0, 0.002, (MINUTES, 3)), axis=0) + [1.0, 0.0, 0.0]
        path[:, 1] += swing
        paths.append(path / np.linalg.norm(path, axis=1, keepdims=True))
    return paths


def window(day: int, state: np.ndarray) -> PastWindow:
    """A night as a window."""
    return PastWindow(start_us=day * DAY_US, length_s=43_200.0, at_us=day * DAY_US + MINUTE_US * np.arange(MINUTES), state=state,
                      is_trusted=np.ones(MINUTES, bool), start_hour=20.0, is_working_day=True)


def loop_sops(nights: list[PastWindow]) -> int:
    """Plain loop: the smallest rotation from each night's start, applied to today's state."""
    return sum(fails(night, angle_between_rad(turned(smallest_rotation(night.state[0], night.state).quaternion, NOW), WANTED))
               for night in nights)


def loop_angles(nights: list[PastWindow]) -> int:
    """Plain loop: change of angle added to today's."""
    now_rad = float(angle_between_rad(NOW, WANTED))
    return sum(fails(night, now_rad + night.state - night.state[0]) for night in nights)


def fails(night: PastWindow, angle_rad: np.ndarray) -> bool:
    """The facts of one night that a clearance needs."""
    gap_us = np.diff(night.at_us, append=night.end_us)
    held_s = np.where(night.is_trusted & np.isfinite(angle_rad), np.minimum(gap_us, 3 * np.median(gap_us)) / 1e6, 0.0)
    beyond = (angle_rad > LIMIT_RAD) & (held_s > 0.0)
    crossed = np.flatnonzero(beyond)
    facts = (held_s.sum() / night.length_s, np.nanmax(angle_rad), night.at_us[crossed[0]] if len(crossed) else None)
    return bool(held_s[beyond].sum() > RUN.allowed_s and len(facts) == 3)


def tell(what: str, ours: Clearance, ours_s: float, loop_failed: int, loop_s: float) -> None:
    """One line: time, reference, whether wanted is met; both must find the same nights."""
    if len(ours.failed) != loop_failed:
        raise SystemExit(f"{what}: {len(ours.failed)} nights failed, {loop_failed} by the loop.")
    met = "yes" if ours_s <= 0.050 else "no"
    row(f"{what}: ours / plain loop", f"{ours_s * 1e3:.1f} ms / {loop_s * 1e3:.1f} ms ({ours_s / loop_s:.2f} x; {ours.held} of "
        f"{ours.count} hold)", f"≤ 50 ms, met: {met}")


def main() -> None:
    """Time clearances, a back-test and fits, each against its reference in the same run."""
    paths = invented_nights()
    angles = [angle_between_rad(path, WANTED) for path in paths]
    by_sop, by_angle = ([window(day, state) for day, state in enumerate(states)] for states in (paths, angles))
    sop_now, angle_now = StartReading(state=NOW), StartReading(state=float(angle_between_rad(NOW, WANTED)))

    def clear_sop() -> Clearance:
        return clear_sop_run(by_sop, RUN, sop_now, LIMIT_RAD, wanted=WANTED)

    def clear_angle() -> Clearance:
        return clear_angle_run(by_angle, RUN, angle_now, LIMIT_RAD)

    tell("100 nights, Stokes", clear_sop(), best_of(ROUNDS, clear_sop), loop_sops(by_sop),
         best_of(ROUNDS, lambda: loop_sops(by_sop)))
    tell("100 nights, two-port", clear_angle(), best_of(ROUNDS, clear_angle), loop_angles(by_angle),
         best_of(ROUNDS, lambda: loop_angles(by_angle)))
    walked_s = [best_of(1, lambda: summed_up(walk_forward_sops(by_sop, LIMIT_RAD, wanted=WANTED))),
                best_of(1, lambda: summed_up(walk_forward_angles(by_angle, LIMIT_RAD)))]
    row("back-test of one bench, 100 nights: Stokes / two-port", f"{walked_s[0]:.2f} s / {walked_s[1]:.2f} s",
        f"100 benches: {100 * walked_s[0]:.0f} s / {100 * walked_s[1]:.0f} s")
    at_s, random = 60.0 * np.arange(MINUTES), np.random.default_rng(2)
    wandering = 3.0 + np.cumsum(random.normal(0, 0.02, MINUTES))
    turning = 3.0 + np.convolve(random.normal(0, 0.1, MINUTES + 60), np.exp(-np.arange(60) / 15.0), "valid")[:MINUTES]
    for name, level in (("walk", wandering), ("turns back", turning)):
        answer = time_to_limit(at_s, level, float(level.max()) + 1.0, horizon_s=86_400.0)
        spent_s = best_of(ROUNDS, lambda level=level: time_to_limit(at_s, level, float(level.max()) + 1.0, horizon_s=86_400.0))
        found = answer.choice.model.value if answer.choice else "none"
        row(f"time to limit from 12 h at 1/min, {name}", f"{spent_s * 1e3:.0f} ms ({found}; reached within a day: "
            f"{answer.reached:.2f})", "–")


if __name__ == "__main__":
    main()
