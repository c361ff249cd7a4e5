"""Which slot of the time axis a reading's block covers.

Slots of one tap never overlap. Their lengths divide one another and each begins at a whole multiple of its length, so two
of them are nested or apart: where a slot would cover an existing shorter one, it is cut into shorter ones.
"""

from collections.abc import Iterable

import numpy as np

from ingest.store.columns import IntArray
from ingest.times import SECOND_US

LENGTHS_S = (86_400, 3_600, 600, 300, 60, 30, 10, 5, 1)
_WANTED = 6_000  # readings in a block: 10 min at 10 Hz
_LEAST = 60  # a slot this well filled is not made longer


def slot_length_s(at_us: IntArray) -> int:
    """Length of slot for readings that follow as these do: 600 s up to 10 Hz, shorter when faster, longer when rare.

    Args:
        at_us: Sorted times, us, shape (N,).
    """
    steps = np.diff(at_us)
    steps = steps[steps > 0]
    if len(steps) < 3:
        return 600
    per_s = SECOND_US / float(np.median(steps))
    for length_s in LENGTHS_S:
        if per_s * length_s <= (_WANTED if length_s <= 600 else 10 * _LEAST):
            return length_s
    return LENGTHS_S[-1]


def slots_of(at_us: IntArray, length_s: int, taken: list[tuple[int, int]]) -> tuple[IntArray, IntArray]:
    """Start and length of each reading's slot, us, shape (N,).

    Args:
        at_us: Times, us, shape (N,).
        length_s: Wanted length of new slots, one of ``LENGTHS_S``.
        taken: (start, length) of existing slots that may cover or touch the readings, us, sorted.
    """
    start_us, length_us = np.empty_like(at_us), np.zeros_like(at_us)
    if taken:
        starts = np.array([start for start, _ in taken], np.int64)
        lengths = np.array([length for _, length in taken], np.int64)
        before = np.searchsorted(starts, at_us, side="right") - 1
        inside = (before >= 0) & (at_us < starts[before] + lengths[before])
        start_us[inside], length_us[inside] = starts[before[inside]], lengths[before[inside]]
    for shorter_s in LENGTHS_S[LENGTHS_S.index(length_s):]:
        open_ = np.flatnonzero(length_us == 0)
        if not len(open_):
            break
        length = shorter_s * SECOND_US
        wanted = at_us[open_] // length * length
        free = np.isin(wanted, list(_free(np.unique(wanted).tolist(), length, taken)))
        start_us[open_[free]], length_us[open_[free]] = wanted[free], length
    return start_us, length_us


def _free(wanted: Iterable[int], length: int, taken: list[tuple[int, int]]) -> Iterable[int]:
    """Wanted starts whose slot touches no taken one."""
    starts = np.array([start for start, _ in taken], np.int64)
    ends = np.array([start + span for start, span in taken], np.int64)
    for start in wanted:
        if not bool(((starts < start + length) & (ends > start)).any()):
            yield start
