"""Seeded randomness that does not depend on how the time axis is cut into pieces."""

from zlib import crc32

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
HOUR_S = 3600


def generator(seed: int, *words: str | int) -> np.random.Generator:
    """A generator of its own for a named purpose."""
    keys = [word & 0xFFFFFFFF if isinstance(word, int) else crc32(word.encode()) for word in words]
    return np.random.default_rng([seed, *keys])


def white_per_second(seed: int, name: str, at_s: FloatArray) -> FloatArray:
    """Unit white noise that belongs to whole seconds.

    Args:
        seed, name: Which noise.
        at_s: Sorted times, s, shape (N,).
    Returns:
        Shape (N,): a second has the same noise however often and in whatever pieces the time axis is asked for.
    """
    second = np.floor(at_s).astype(np.int64)
    hours = second // HOUR_S
    noise = np.empty(len(at_s))
    for hour in np.unique(hours).tolist():
        first, last = np.searchsorted(hours, [hour, hour + 1])
        drawn = generator(seed, name, hour).standard_normal(HOUR_S, dtype=np.float32)
        noise[first:last] = drawn[second[first:last] - hour * HOUR_S]
    return noise


def white_per_day(seed: int, name: str, first_day: int, day_count: int, per_day: int) -> FloatArray:
    """Unit white noise for whole days, drawn day by day: shape (day_count · per_day,)."""
    days = [generator(seed, name, day).standard_normal(per_day) for day in range(first_day, first_day + day_count)]
    return np.concatenate(days) if days else np.empty(0)
