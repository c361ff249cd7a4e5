"""Reduction of long records: Stokes samples beside the bare expression for DOP, and a day's flicker slope.

*DOP and states* computes DOP (NaN where S0 <= 0) and unit Stokes vectors, shape (N, 3). *Full* is `reduce_stokes` with a
wanted state: these, azimuth, ellipticity, both port powers, ER with bounds, polarized ER, angle, and the reasons of four
quantities. The bare expression computes DOP alone: sqrt(s1^2 + s2^2 + s3^2)/s0.
"""

import numpy as np

from analysis.reduce.calibration import TapCalibration
from analysis.reduce.flicker import FlickerState, flicker_er
from analysis.reduce.stokes import dop_and_sop, reduce_stokes
from benchmarks.lab import best_of, median, row

SAMPLES = 10_000_000
DAY_S = 86_400
ROUNDS = 5


def main() -> None:
    """Time each in turn, ``ROUNDS`` times, and print one line for each figure."""
    random = np.random.default_rng(1)
    s0 = 1e-3 * (1.0 + 1e-3 * random.standard_normal(SAMPLES))
    s1, s2, s3 = (5e-4 * (1.0 + 0.1 * random.standard_normal(SAMPLES)) for _ in range(3))
    columns, calibration = {"s0": s0, "s1": s1, "s2": s2, "s3": s3}, TapCalibration(wanted_state=[1.0, 0.0, 0.0])

    def bare() -> np.ndarray:
        return np.sqrt(s1**2 + s2**2 + s3**2) / s0

    np.testing.assert_allclose(dop_and_sop(s0, s1, s2, s3)[0], bare(), rtol=1e-12)
    actions = (bare, lambda: dop_and_sop(s0, s1, s2, s3), lambda: reduce_stokes(columns, "W", calibration))
    times = [[best_of(1, action) for action in actions] for _ in range(ROUNDS)]
    bare_s, lean_s, full_s = (median(list(one)) for one in zip(*times, strict=True))
    print("| what | ours | reference in the same run | ratio | wanted | met |")
    print("|---|---|---|---|---|---|")
    report("1e7 Stokes samples, DOP and states", lean_s, "bare DOP", bare_s)
    report("1e7 Stokes samples, full reduction", full_s, "bare DOP", bare_s)

    bright = 1e-3 * (1.0 + 1e-2 * random.standard_normal(DAY_S))
    dark = 1e-3 * bright + 3e-7 + 1e-9 * random.standard_normal(DAY_S)
    at_s = np.arange(DAY_S, dtype=float)
    assert flicker_er(bright, dark, at_s, bright_sigma=2e-8).state is FlickerState.MEASURED
    slope_s = median([best_of(1, lambda: flicker_er(bright, dark, at_s, bright_sigma=2e-8)) for _ in range(21)])
    row("flicker slope, 24 h at 1 Hz", f"{slope_s * 1e3:.1f} ms | – | –", f"≤ 20 ms | {met(slope_s <= 0.02)}")


def report(what: str, ours_s: float, reference: str, reference_s: float) -> None:
    """One line: speed is the inverse of time."""
    ratio = reference_s / ours_s
    row(what, f"{ours_s * 1e3:.0f} ms | {reference} {reference_s * 1e3:.0f} ms | {ratio:.2f} x its speed",
        f"≥ 0.5 x | {met(ratio >= 0.5)}")


def met(is_met: bool) -> str:
    """The last column."""
    return "yes" if is_met else "no"


if __name__ == "__main__":
    main()
