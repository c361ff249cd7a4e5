"""Cells as bytes, column by column, so that a picture of one quantity reads only what it draws; and back."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
import zstandard
from numpy.typing import NDArray

from analysis.rollup.cells import CELL, Cells
from analysis.rollup.histogram import Histogram

#: Layout of the bodies made here; another layout gets another number.
LAYOUT: Final = 2
_BUCKET: Final = "bucket_us"
_HISTOGRAM: Final = {"histogram_cell": np.dtype("<u4"), "histogram_bin": np.dtype("<i2"), "histogram_count": np.dtype("<u4")}
_KINDS: Final = {_BUCKET: np.dtype("<i8"), **_HISTOGRAM, **{name: CELL[name] for name in CELL.names or ()}}
FRAMES: Final = tuple(_KINDS)


@dataclass(frozen=True, slots=True)
class Packed:
    """Cells of one tap and level: one compressed frame a column, in the order of `FRAMES`; frame k ends at ``ends[k]``."""

    count: int
    ends: list[int]
    body: bytes


def packed(cells: Cells) -> Packed:
    """The cells' columns, compressed one by one; level and tap are kept beside them."""
    histogram = cells.er_histogram
    columns = dict(zip(FRAMES, (cells.bucket_us, histogram.cell, histogram.bin, histogram.count), strict=False))
    columns |= {name: cells.values[name] for name in CELL.names or ()}
    compress = zstandard.ZstdCompressor(level=3).compress
    frames = [compress(np.ascontiguousarray(columns[name], dtype=_KINDS[name].base).tobytes()) for name in FRAMES]
    return Packed(len(cells), np.cumsum([len(frame) for frame in frames]).tolist(), b"".join(frames))


def cells_of_packed(found: Packed, layout: int, level_s: int, tap: int = 0) -> Cells:
    """The cells of `packed`, given the index ``tap``.

    Raises:
        ValueError: Another layout, or bytes that are no cells.
    """
    if len(found.ends) != len(FRAMES):
        raise ValueError(f"{len(found.ends)} frames are no rollup cells; recompute them from the readings.")
    frames = [found.body[begin:end] for begin, end in zip([0, *found.ends[:-1]], found.ends, strict=True)]
    columns = columns_of(FRAMES, frames, found.count, layout)
    values = np.zeros(found.count, dtype=CELL)
    for name in CELL.names or ():
        values[name] = columns[name]
    bucket_us = columns[_BUCKET].astype(np.int64)
    histogram = Histogram(*(columns[name].astype(np.int64) for name in _HISTOGRAM))
    return Cells(level_s, np.full(found.count, tap, dtype=np.int64), bucket_us, values, histogram)


def columns_of(names: Sequence[str], frames: Sequence[bytes], count: int, layout: int) -> dict[str, NDArray[Any]]:
    """Chosen columns from their frames, shape (count,) or (count, width); those of the histogram as long as they are.

    Raises:
        ValueError: Another layout, or bytes that are no such column.
    """
    if layout != LAYOUT:
        raise ValueError(f"rollup cells of layout {layout} are not of {LAYOUT}; recompute them from the readings.")
    expand = zstandard.ZstdDecompressor().decompress
    try:
        return {name: _column(name, expand(frame), count) for name, frame in zip(names, frames, strict=True)}
    except zstandard.ZstdError as fault:
        raise ValueError(f"these bytes are no rollup cells ({fault}); recompute them from the readings.") from fault


def _column(name: str, raw: bytes, count: int) -> NDArray[Any]:
    kind = _KINDS[name]
    if name in _HISTOGRAM:
        return np.frombuffer(raw, kind)
    if len(raw) != count * kind.itemsize:
        raise ValueError(f"column {name} has {len(raw)} bytes for {count} cells; recompute them from the readings.")
    return np.frombuffer(raw, kind.base).reshape(count, *kind.shape)
