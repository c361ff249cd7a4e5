"""Cells as bytes, for storage, and back."""

import struct
from collections.abc import Sequence
from typing import Any, Final

import numpy as np
import zstandard
from numpy.typing import NDArray

from analysis.quantities import IntArray
from analysis.rollup.cells import CELL, Cells
from analysis.rollup.histogram import Histogram

_MAGIC: Final = b"cell"
_VERSION: Final = 1
_HEADER: Final = struct.Struct("<4sHHIII")  # magic, version, size of a cell, level, cells, histogram bins


def bytes_of(cells: Cells) -> bytes:
    """Cells of one tap as compressed bytes; their ``tap`` index is not kept."""
    histogram = cells.er_histogram
    head = _HEADER.pack(_MAGIC, _VERSION, CELL.itemsize, cells.level_s, len(cells), len(histogram.bin))
    columns = [
        cells.bucket_us.astype("<i8"),
        histogram.cell.astype("<u4"),
        histogram.bin.astype("<i2"),
        histogram.count.astype("<u4"),
    ]
    # Column by column: like beside like compresses best.
    columns += [np.ascontiguousarray(cells.values[name]) for name in CELL.names or ()]
    return head + zstandard.ZstdCompressor(level=3).compress(b"".join(column.tobytes() for column in columns))


def _opened(body: bytes) -> tuple[int, int, int, bytes]:
    """Level, number of cells and of histogram bins, and the columns behind one another."""
    if len(body) < _HEADER.size:
        raise ValueError(f"{len(body)} bytes are too few for rollup cells; recompute them from the readings.")
    magic, version, size, level_s, count, bins = _HEADER.unpack_from(body)
    if magic != _MAGIC or version != _VERSION or size != CELL.itemsize:
        raise ValueError(
            f"rollup cells of version {version} and size {size} are not {_VERSION} and {CELL.itemsize}; recompute them."
        )
    return level_s, count, bins, zstandard.ZstdDecompressor().decompress(body[_HEADER.size :])


def cells_from(body: bytes, tap: int = 0) -> Cells:
    """Cells that `bytes_of` wrote, given the index ``tap``.

    Raises:
        ValueError: The bytes are no cells, or of another version (recompute the rollup from raw readings).
    """
    level_s, count, bins, raw = _opened(bytes(body))
    position = 0

    def read(dtype: np.dtype, rows: int) -> np.ndarray:
        nonlocal position
        array = np.frombuffer(raw, dtype.base, rows * max(dtype.itemsize // dtype.base.itemsize, 1), position)
        position += array.nbytes
        return array.reshape(rows, *dtype.shape)

    bucket_us = read(np.dtype("<i8"), count).astype(np.int64)
    histogram = Histogram(*(read(np.dtype(kind), bins).astype(np.int64) for kind in ("<u4", "<i2", "<u4")))
    values = np.zeros(count, dtype=CELL)
    for name in CELL.names or ():
        values[name] = read(CELL[name], count)
    return Cells(level_s, np.full(count, tap, dtype=np.int64), bucket_us, values, histogram)


def columns_from(body: bytes, names: Sequence[str]) -> tuple[IntArray, dict[str, NDArray[Any]]]:
    """Bucket starts and chosen columns of what `bytes_of` wrote: all that a picture of one quantity needs.

    Raises:
        ValueError: As `cells_from`.
    """
    body = bytes(body)
    count, bins, raw = _opened(body)[1:]
    found: dict[str, NDArray[Any]] = {}
    position = count * 8 + bins * (4 + 2 + 4)
    for name in CELL.names or ():
        kind = CELL[name]
        width = kind.shape[0] if kind.shape else 1
        if name in names:
            found[name] = np.frombuffer(raw, kind.base, count * width, position).reshape(count, *kind.shape)
        position += count * kind.itemsize
    return np.frombuffer(raw, "<i8", count), found
