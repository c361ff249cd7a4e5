"""A histogram of ER that merges by adding: bins of 0.1 dB, kept sparse, so that quantiles survive merging."""

from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.quantities import FloatArray, IntArray

BIN_DB: Final = 0.1
LOWEST_DB, HIGHEST_DB = -100.0, 100.0
_LOWEST_BIN: Final = round(LOWEST_DB / BIN_DB)
_BINS: Final = round((HIGHEST_DB - LOWEST_DB) / BIN_DB) + 1


@dataclass(frozen=True, slots=True)
class Histogram:
    """Counts of H filled bins of M cells, sorted by (cell, bin), each once, shape (H,).

    Attributes:
        cell: Index of the cell, 0 to M - 1.
        bin: floor(er_db / 0.1), values outside -100 to 100 dB in the outermost bins.
        count: Samples in the bin, above 0.
    """

    cell: IntArray
    bin: IntArray
    count: IntArray

    def take(self, index: IntArray) -> "Histogram":
        """Bins of chosen cells (rising ``index``), renumbered 0, 1, …."""
        found = np.searchsorted(index, self.cell)
        keep = (
            (found < len(index)) & (index[np.minimum(found, max(len(index) - 1, 0))] == self.cell)
            if len(index)
            else np.zeros(len(found), bool)
        )
        return Histogram(found[keep], self.bin[keep], self.count[keep])


def histogram_of(er_db: FloatArray, cell: IntArray, cells: int) -> Histogram:
    """Histogram of samples, ``er_db`` finite, each in a cell 0 to cells - 1; shape (N,)."""
    bins = np.floor(np.clip(er_db, LOWEST_DB, HIGHEST_DB) / BIN_DB).astype(np.int64)
    return _counted(cell, bins, np.ones(len(bins), dtype=np.int64), cells)


def merge_histograms(histogram: Histogram, target: IntArray, cells: int) -> Histogram:
    """Add up the bins of cells that become one; ``target`` names the new cell of each old one."""
    return _counted(target[histogram.cell], histogram.bin, histogram.count, cells)


def quantiles(histogram: Histogram, cells: int, shares: FloatArray) -> FloatArray:
    """Quantiles of each cell, dB, shape (cells, Q), NaN for empty cells; off by at most half a bin (0.05 dB).

    The quantile q is the middle of the bin that holds the sample of rank ceil(q n) (the inverse of the empirical
    distribution), at least the first.
    """
    result = np.full((cells, len(shares)), np.nan)
    starts = np.searchsorted(histogram.cell, np.arange(cells + 1))
    for cell in range(cells):
        low, high = starts[cell], starts[cell + 1]
        if low == high:
            continue
        reached = np.cumsum(histogram.count[low:high])
        ranks = np.clip(np.ceil(np.asarray(shares) * reached[-1]), 1, reached[-1])
        result[cell] = (histogram.bin[low + np.searchsorted(reached, ranks)] + 0.5) * BIN_DB
    return result


def _counted(cell: IntArray, bins: IntArray, count: IntArray, cells: int) -> Histogram:
    if len(bins) < cells * 8 or cells * _BINS > 4_000_000:
        key, inverse = np.unique(cell * _BINS + (bins - _LOWEST_BIN), return_inverse=True)
        total = np.bincount(inverse, weights=count, minlength=len(key)).astype(np.int64)
    else:
        dense = np.bincount(cell * _BINS + (bins - _LOWEST_BIN), weights=count, minlength=cells * _BINS)
        key = np.flatnonzero(dense)
        total = dense[key].astype(np.int64)
    return Histogram(key // _BINS, key % _BINS + _LOWEST_BIN, total)
