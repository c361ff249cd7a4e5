"""How a station's clock ran against the server's, from its newest batches. Pure.

Each batch was sent at a moment of the station's clock and arrived at one of the server's: their difference is the clock's
offset plus the way, and the way is never negative. So the lowest differences follow the clock (the minimum filter of NTP's
clock filter, RFC 5905 section 10; from memory). Offset, skew and step come from the lowest of each of some bins.
Source: docs/formulas.md, F-119.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np

from ingest.store.columns import IntArray

LEAST_BATCHES: Final = 10
BINS: Final = 12
#: A step smaller than this is not told apart from a slow way.
LEAST_STEP_S: Final = 0.5
_SURE: Final = 4.0
_MAD_TO_SIGMA: Final = 1.4826


@dataclass(frozen=True, slots=True)
class ClockCourse:
    """``offset_s``: server - station now, s; ``error_s`` its 1 sigma; ``skew_ppm`` None where none is seen beyond its doubt.

    ``step_s`` is by how much the offset jumped at ``step_us`` (data time of the server), None where it did not.
    """

    offset_s: float
    error_s: float
    skew_ppm: float | None
    step_s: float | None
    step_us: int | None
    batches: int


def clock_course(arrival_us: IntArray, sent_us: IntArray) -> ClockCourse | None:
    """The course of a clock.

    Args:
        arrival_us: Server's clock at each batch's arrival, shape (N,).
        sent_us: The station's own clock when it sent it, shape (N,); batches placed by the server's clock say nothing.
    Returns:
        See `ClockCourse`; None below `LEAST_BATCHES` batches.
    """
    pairs = np.unique(np.column_stack([arrival_us, sent_us]), axis=0)
    if len(pairs) < LEAST_BATCHES:
        return None
    delay_s = (pairs[:, 0] - pairs[:, 1]) / 1e6
    at_s = (pairs[:, 0] - pairs[0, 0]) / 1e6
    parts = np.array_split(np.arange(len(pairs)), min(BINS, len(pairs) // 2))
    lows = np.array([delay_s[part].min() for part in parts])
    when_s = np.array([at_s[part].mean() for part in parts])
    noise_s = max(_MAD_TO_SIGMA * float(np.median(np.abs(np.diff(lows) - np.median(np.diff(lows))))) / np.sqrt(2.0), 1e-4)
    step_s, cut = _step(lows, noise_s)
    kept = slice(cut, None)
    slope, slope_error = _slope(when_s[kept], lows[kept], noise_s)
    is_skewed = abs(slope) > _SURE * slope_error
    level = float(np.min(lows[kept] - slope * (when_s[kept] - when_s[-1]))) if is_skewed else float(lows[kept].min())
    error_s = float(np.hypot(noise_s, np.median(lows[kept]) - lows[kept].min())) if not is_skewed else noise_s
    step_us = None if step_s is None else int(pairs[parts[cut][0], 0])
    return ClockCourse(level, error_s, 1e6 * slope if is_skewed else None, step_s, step_us, len(pairs))


def _step(lows: np.ndarray, noise_s: float) -> tuple[float | None, int]:
    """The largest jump between neighbours that holds to both ends, and where the piece after it begins."""
    jumps = np.diff(lows)
    place = int(np.argmax(np.abs(jumps))) if len(jumps) else 0
    if not len(jumps) or abs(jumps[place]) < max(LEAST_STEP_S, 2.0 * _SURE * noise_s):
        return None, 0
    size = float(np.median(lows[place + 1:]) - np.median(lows[:place + 1]))
    return (size, place + 1) if abs(size) > 0.7 * abs(jumps[place]) else (None, 0)


def _slope(when_s: np.ndarray, lows: np.ndarray, noise_s: float) -> tuple[float, float]:
    """Least squares through the lows, s/s, and its 1 sigma."""
    if len(lows) < 4:
        return 0.0, np.inf
    spread = float(np.square(when_s - when_s.mean()).sum())
    if spread <= 0.0:
        return 0.0, np.inf
    slope = float(((when_s - when_s.mean()) * (lows - lows.mean())).sum() / spread)
    rest = lows - lows.mean() - slope * (when_s - when_s.mean())
    return slope, float(max(noise_s, rest.std(ddof=2)) / np.sqrt(spread))
