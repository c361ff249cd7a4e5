"""A ledger's intervals as they are kept: one compressed NumPy archive (.npz), readable without labmon."""

import io

import numpy as np

from analysis.judge.ledger import Intervals

_NAMES = ("first_s", "length_s", "klass", "is_doubtful", "why", "taps")


def packed(intervals: Intervals) -> bytes:
    """The intervals as bytes."""
    file = io.BytesIO()
    np.savez_compressed(file, allow_pickle=False, **{name: getattr(intervals, name) for name in _NAMES})
    return file.getvalue()


def unpacked(body: bytes) -> Intervals:
    """What `packed` made."""
    with np.load(io.BytesIO(bytes(body)), allow_pickle=False) as kept:
        return Intervals(*(kept[name] for name in _NAMES))
