"""Cells one by one as small bodies, many at a time: for the rows of days that still change."""

from collections.abc import Sequence
from typing import Final

import numpy as np
import zstandard

from analysis.quantities import IntArray
from analysis.rollup.cells import CELL, Cells
from analysis.rollup.histogram import Histogram

_BIN: Final = np.dtype([("bin", "<i2"), ("count", "<u4")])
_MARK: Final = bytes([1])  # layout of these bodies; another layout gets another mark


def row_bodies(cells: Cells) -> list[bytes]:
    """A body for each cell; level, tap and bucket are kept beside it."""
    compress = zstandard.ZstdCompressor(level=1).compress
    values = cells.values.tobytes()
    bins = np.empty(len(cells.er_histogram.bin), dtype=_BIN)
    bins["bin"], bins["count"] = cells.er_histogram.bin, cells.er_histogram.count
    packed, size = bins.tobytes(), CELL.itemsize
    ends = (np.searchsorted(cells.er_histogram.cell, np.arange(len(cells) + 1)) * _BIN.itemsize).tolist()
    return [
        _MARK + compress(values[number * size : (number + 1) * size] + packed[ends[number] : ends[number + 1]])
        for number in range(len(cells))
    ]


def cells_of_rows(bodies: Sequence[bytes], level_s: int, tap: IntArray, bucket_us: IntArray) -> Cells:
    """The cells of bodies, with the tap index and bucket of each, shape (M,), sorted by (tap, bucket).

    Raises:
        ValueError: A body has another layout.
    """
    expand = zstandard.ZstdDecompressor().decompress
    raw = []
    for body in bodies:
        plain = bytes(body)
        if plain[:1] != _MARK:
            raise ValueError("a rollup row has another layout; make the rollups anew from the readings.")
        raw.append(expand(plain[1:]))
    values = np.frombuffer(b"".join([one[: CELL.itemsize] for one in raw]), dtype=CELL).copy()
    counts = [(len(one) - CELL.itemsize) // _BIN.itemsize for one in raw]
    bins = np.frombuffer(b"".join([one[CELL.itemsize :] for one in raw]), dtype=_BIN)
    histogram = Histogram(np.repeat(np.arange(len(raw)), counts), bins["bin"].astype(np.int64), bins["count"].astype(np.int64))
    return Cells(level_s, tap, bucket_us, values, histogram)
