"""Drift statistics: the overlapping Allan deviation against allantools, and a tap's night in one call.

Wanted: at least 10 x allantools' speed with equal results; a night of 24 h at 10 Hz in at most 0.5 s.
"""

from collections.abc import Callable

import allantools
import numpy as np

from analysis.drift.allan_curve import octaves, overlapping_allan_deviation
from analysis.drift.night import night_statistics
from analysis.fibre.sphere import turned
from analysis.fibre.walk import walk_rotations
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.sample import Reduced
from analysis.reduce.tap import reduce_tap
from benchmarks.lab import best_of, median, row

POINTS = 1_000_000
READINGS = 864_000
START_US = 1_900_000_000_000_000
ROUNDS = 7


def main() -> None:
    """Compare on white noise and on a random walk; then the nights."""
    random = np.random.default_rng(1)
    white = random.standard_normal(POINTS)
    for name, level in (("white noise", white), ("random walk", np.cumsum(white))):
        compare(name, level)
    for name, reduced in (("Stokes", stokes_night(random)), ("two ports", two_port_night(random))):
        time_night(name, reduced)


def compare(name: str, level: np.ndarray) -> None:
    """Both in turn, round by round, so that a busy machine slows both."""
    taus = octaves(POINTS).astype(float)

    def ours() -> np.ndarray:
        return overlapping_allan_deviation(level, 1.0).deviation

    def theirs() -> np.ndarray:
        return allantools.oadev(level, rate=1.0, data_type="freq", taus=taus)[1]

    expected = theirs()
    apart = float(np.max(np.abs(ours()[: len(expected)] / expected - 1.0)))
    times = np.array([[best_of(1, ours), best_of(1, theirs)] for _ in range(ROUNDS)])
    mine, other = median(list(times[:, 0])), median(list(times[:, 1]))
    row(f"overlapping Allan deviation, 10^6 points, {len(expected)} octaves, {name}: allantools / ours",
        f"{other / mine:.1f} x ({mine * 1e3:.1f} ms, {other * 1e3:.0f} ms), {met(other / mine >= 10.0)}", "≥ 10 x")
    row("the same: largest relative difference", f"{apart:.0e}, {met(apart <= 1e-9)}", "≤ 1e-9")


def time_night(name: str, reduced: Reduced) -> None:
    """Median of some calls."""
    action: Callable[[], object] = lambda: night_statistics(reduced)  # noqa: E731
    taken_s = median([best_of(1, action) for _ in range(5)])
    row(f"night statistics, 24 h at 10 Hz, {len(reduced)} readings with gaps, {name}",
        f"{taken_s:.2f} s, {met(taken_s <= 0.5)}", "≤ 0.5 s")


def met(is_met: bool) -> str:
    """In words."""
    return "met" if is_met else "not met"


def times_us(random: np.random.Generator) -> np.ndarray:
    """A day of readings with jitter, 2000 single losses and a gap of an hour."""
    at_us = START_US + np.arange(READINGS, dtype=np.int64) * 100_000 + random.integers(-20, 20, READINGS)
    keep = np.ones(READINGS, dtype=bool)
    keep[random.integers(0, READINGS, 2000)] = False
    keep[300_000:336_000] = False
    return at_us[keep]


def stokes_night(random: np.random.Generator) -> Reduced:
    """A walking state with reading noise."""
    at_us = times_us(random)
    sop = turned(walk_rotations(len(at_us), 0.1, 1e-7, random), np.array([1.0, 0.0, 0.0]))
    sop += 0.003 * random.standard_normal(sop.shape)
    columns = {"s0": np.full(len(at_us), 1e-3), **{f"s{k + 1}": 0.97e-3 * sop[:, k] for k in range(3)}}
    return reduce_tap("stokes", "W", at_us, columns, TapCalibration(wanted_state=[1.0, 0.0, 0.0]))


def two_port_night(random: np.random.Generator) -> Reduced:
    """A dark port that breathes with the room."""
    at_us = times_us(random)
    bright = 1e-3 * (1.0 + 1e-3 * random.standard_normal(len(at_us)))
    dark = 3e-6 * (1.0 + 0.4 * np.sin(2.0 * np.pi * at_us / 1.3e9)) + 1e-8 * random.standard_normal(len(at_us))
    return reduce_tap("two-port", "W", at_us, {"port1": bright, "port2": dark}, TapCalibration())


if __name__ == "__main__":
    main()
