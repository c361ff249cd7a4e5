"""Slow statistics of one tap's day (86 400 readings at 1 Hz): thermal arc of both kinds, trend, lines, changes.

Wanted: at most 20 ms for each arc. The reference in the same run is one sine of as many numbers.
"""

import numpy as np

from analysis.drift.arc_leak import fit_leak_arc
from analysis.drift.arc_sphere import fit_sphere_arc
from analysis.drift.changes.run_length import cusum_limit
from analysis.drift.changes.segments import halved, segments
from analysis.drift.lines import Background, find_lines
from analysis.drift.temperature import temperature_response
from analysis.drift.trend import trend
from benchmarks.lab import best_of, median, row

READINGS = 86_400
ROUNDS = 9


def day(seed: int = 1) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Times, leak, temperature and states of a PM cord in a room that cycles in 24 min."""
    random = np.random.default_rng(seed)
    at_s = np.arange(READINGS)
    temperature = 0.3 * np.sin(2 * np.pi * at_s / 1440)
    phase = 4.8 * temperature + 1.0
    fraction = 1.37e-3 * (1 + np.cos(phase)) * (1 + 0.02 * random.normal(size=READINGS))
    axis, one, other = np.eye(3)
    radius = np.radians(3.0)
    sop = np.cos(radius) * axis + np.sin(radius) * (np.outer(np.cos(phase), one) + np.outer(np.sin(phase), other))
    sop += 1e-3 * random.normal(size=sop.shape)
    return at_s * 1_000_000, fraction / (1 - fraction), temperature + 0.01 * random.normal(size=READINGS), sop


def main() -> None:
    """Time each on the same day."""
    at_us, leak, temperature_k, sop = day()
    wanted, at_s = np.array([0.998, 0.06, 0.0]), np.arange(READINGS, dtype=float)
    minutes = leak.reshape(-1, 60).mean(axis=1)
    sine_s = median([best_of(1, lambda: np.sin(at_s)) for _ in range(ROUNDS)])

    def timed(what, action, limit_s=None):
        spent_s = median([best_of(1, action) for _ in range(ROUNDS if limit_s else 3)])
        met = "" if limit_s is None else f"≤ {limit_s * 1e3:.0f} ms: {'yes' if spent_s <= limit_s else 'NO'}"
        row(what, f"{spent_s * 1e3:.1f} ms ({spent_s / sine_s:.0f} x one sine of {READINGS} numbers)", met or "-")

    timed("thermal arc by two ports, 24 h at 1 Hz", lambda: fit_leak_arc(at_us, leak, temperature_k), 0.020)
    timed("thermal arc on the sphere, 24 h at 1 Hz", lambda: fit_sphere_arc(at_us, sop, wanted), 0.020)
    timed("trend over 10-min means", lambda: trend(at_us, leak, 600))
    timed("temperature response, 1-min means, lags to 30 min",
          lambda: temperature_response(at_us, leak, at_us, temperature_k, bin_s=60, longest_lag_s=1800))
    timed("lines up to 0.5 Hz, white background", lambda: find_lines(at_us, leak, high_hz=0.5))
    timed("lines up to 0.5 Hz, red background", lambda: find_lines(at_us, leak, high_hz=0.5, background=Background.RED))
    timed("changes, exact, 1 440 means", lambda: segments(minutes))
    timed("changes by halving, 86 400 readings", lambda: halved(leak))
    timed("limit of a CUSUM for a run of 10 000", lambda: cusum_limit(0.5, 1e4))


if __name__ == "__main__":
    main()
