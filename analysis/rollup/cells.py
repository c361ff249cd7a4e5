"""Rollup cells: what is kept of the samples of one bucket, so that cells merge to the cell of the whole.

Merging is associative and commutative (sums and counts exactly or to rounding, minima and maxima exactly). ER is kept
as sums of signed port powers, never as means of dB; directions as sums of vectors. Source: docs/formulas.md, F-16 to F-18.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from analysis.judge.rule import Quantity
from analysis.quantities import US_PER_S, BoolArray, FloatArray, IntArray
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import QUANTITIES, UNTRUSTED_REASONS, Reason, Trust, is_usable
from analysis.rollup.groups import Groups
from analysis.rollup.histogram import Histogram, histogram_of, merge_histograms
from analysis.rollup.moments import Moments, group_moments, merged_moments

LEVELS_S: Final = (10, 60, 600, 3600, 86400)
HOLD_INTERVALS: Final = 3.0
AIR: Final = ("temperature_c", "humidity_pct", "pressure_hpa")

_MOMENTS: Final = ("power_w", *AIR)
_SUMS: Final = ("wanted_sum", "other_sum", "angle_deg_sum", "dop_sum")
_RANGES: Final = ("er_db", "angle_deg", "dop", "power_w", *AIR)

CELL: Final = np.dtype(
    [
        ("count", "<i8"),
        ("trusted", "<i8", 4),
        ("doubtful", "<i8", 4),
        ("untrusted", "<i8", 4),  # by quantity, in the order of QUANTITIES
        ("trusted_us", "<i8", 4),
        ("covered_us", "<i8"),
        ("lower_bounds", "<i8"),
        ("upper_bounds", "<i8"),
        ("er_count", "<i8"),
        ("angle_count", "<i8"),
        ("dop_count", "<i8"),
        ("sop_count", "<i8"),
        *((name, "<f8") for name in _SUMS),
        *((f"{name}_{end}", "<f8") for name in _RANGES for end in ("min", "max")),
        *((f"{name}_count", "<i8") for name in _MOMENTS),
        *((f"{name}_{part}", "<f8") for name in _MOMENTS for part in ("mean", "m2")),
        ("sop_sum", "<f8", 3),
        ("stokes_sum", "<f8", 3),
    ]
)
_SPOILS_DIRECTION: Final = np.uint32(UNTRUSTED_REASONS & ~Reason.UNDEFINED & ~Reason.NEGATIVE)
_ADDED: Final = (
    "count",
    "trusted",
    "doubtful",
    "untrusted",
    "trusted_us",
    "covered_us",
    "lower_bounds",
    "upper_bounds",
    "er_count",
    "angle_count",
    "dop_count",
    "sop_count",
    *_SUMS,
    "sop_sum",
    "stokes_sum",
)


@dataclass(frozen=True, slots=True)
class Cells:
    """M cells of one level, sorted by (tap, bucket), each once.

    Attributes:
        level_s: Length of a bucket, s; buckets start at whole multiples of it since 1970 UTC.
        tap: Whose cell, an index of the caller's choice (0 for one tap), shape (M,).
        bucket_us: Start of the bucket, µs, shape (M,).
        values: The cells, dtype `CELL`, shape (M,). Minima, maxima are NaN where nothing was usable; ``stokes_sum`` is of
            S1, S2, S3 in W (of unit vectors where the tap gives no power).
        er_histogram: Of the usable ER samples, bounds included at their bound.
    """

    level_s: int
    tap: IntArray
    bucket_us: IntArray
    values: NDArray[Any]
    er_histogram: Histogram

    def __len__(self) -> int:
        return len(self.bucket_us)

    def take(self, index: IntArray | BoolArray) -> "Cells":
        """Chosen cells; ``index`` in rising order."""
        index = np.flatnonzero(index) if np.asarray(index).dtype == bool else np.asarray(index)
        return Cells(self.level_s, self.tap[index], self.bucket_us[index], self.values[index], self.er_histogram.take(index))


def holds_us(at_us: IntArray, interval_s: FloatArray | float, next_us: int | None = None) -> IntArray:
    """How long each sample of one tap holds, µs: until the next, at most three intervals.

    Args:
        at_us: Sorted, shape (N,).
        interval_s: The tap's nominal interval, s.
        next_us: Time of the first sample behind these, if known; else the last one holds for one interval.
    """
    longest_us = np.round(np.asarray(interval_s) * HOLD_INTERVALS * US_PER_S).astype(np.int64)
    last_us = round(float(np.max(interval_s)) * US_PER_S) if next_us is None else next_us - int(at_us[-1])
    return np.minimum(np.diff(at_us, append=at_us[-1:] + last_us), longest_us)


def cells_of(reduced: Reduced, level_s: int, hold_us: IntArray, tap: IntArray | None = None) -> Cells:
    """Cells of reduced samples.

    Args:
        reduced: Sorted by (tap, time), shape (N,).
        level_s: Length of a bucket, s.
        hold_us: How long each sample holds, see `holds_us`; it counts in the bucket in which it begins.
        tap: Whose sample, shape (N,), rising; one tap if left out.
    """
    tap = np.zeros(len(reduced), dtype=np.int64) if tap is None else tap
    bucket_us = reduced.at_us - reduced.at_us % (level_s * US_PER_S)
    first = _group_starts(tap, bucket_us)
    groups = Groups(first, len(reduced))
    values = np.zeros(len(first), dtype=CELL)
    values["count"] = groups.sizes
    values["covered_us"] = groups.sums(hold_us)
    usable = {quantity: is_usable(reduced.trust[quantity], reduced.values(quantity)) for quantity in QUANTITIES}
    for position, quantity in enumerate(QUANTITIES):
        _count_trust(values, position, reduced.trust[quantity], usable[quantity], hold_us, groups)
    er, angle, dop, power = (usable[quantity] for quantity in QUANTITIES)
    _sum_ports(values, reduced, er, groups)
    _fill_range(values, "er_db", reduced.er_db, er, groups)
    angle_deg = reduced.values(Quantity.ANGLE_DEG)
    values["angle_count"], values["dop_count"] = groups.sums(angle), groups.sums(dop)
    values["angle_deg_sum"] = groups.sums(np.where(angle, angle_deg, 0.0))
    values["dop_sum"] = groups.sums(np.where(dop, reduced.dop, 0.0))
    _fill_range(values, "angle_deg", angle_deg, angle, groups)
    _fill_range(values, "dop", reduced.dop, dop, groups)
    _fill_moments(values, "power_w", reduced.power_w, power, groups)
    for name in AIR:
        air = getattr(reduced, name)
        _fill_moments(values, name, air, np.isfinite(air), groups)
    _sum_directions(values, reduced, groups)
    histogram = histogram_of(reduced.er_db[er], groups.of_sample()[er], len(first))
    return Cells(level_s, tap[first], bucket_us[first], values, histogram)


def usable_directions(reduced: Reduced) -> BoolArray:
    """True where a sample's direction on the sphere may be used, shape (N,); never where the tap gives none."""
    if reduced.sop is None:
        return np.zeros(len(reduced), dtype=bool)
    return np.isfinite(reduced.sop[:, 0]) & ((reduced.reasons[Quantity.DOP] & _SPOILS_DIRECTION) == 0)


def merge(cells: Cells, level_s: int | None = None) -> Cells:
    """Cells of a coarser level (or of the same one, joining double buckets); ``cells`` in any order.

    Raises:
        ValueError: ``level_s`` is not a multiple of the cells' level.
    """
    level_s = cells.level_s if level_s is None else level_s
    if level_s % cells.level_s:
        raise ValueError(f"level_s={level_s} is not a multiple of {cells.level_s}, so buckets would be cut.")
    bucket_us = cells.bucket_us - cells.bucket_us % (level_s * US_PER_S)
    order = np.lexsort((cells.bucket_us, bucket_us, cells.tap))
    tap, bucket_us, old = cells.tap[order], bucket_us[order], cells.values[order]
    first = _group_starts(tap, bucket_us)
    groups = Groups(first, len(old))
    values = np.zeros(len(first), dtype=CELL)
    for name in _ADDED:
        values[name] = groups.sums(old[name])
    for name in _RANGES:
        values[f"{name}_min"] = groups.minima(old[f"{name}_min"])
        values[f"{name}_max"] = groups.maxima(old[f"{name}_max"])
    for name in _MOMENTS:
        _merge_moments(values, old, name, groups)
    target = np.empty(len(order), dtype=np.int64)
    target[order] = groups.of_sample()
    return Cells(level_s, tap[first], bucket_us[first], values, merge_histograms(cells.er_histogram, target, len(first)))


def concatenate(parts: Sequence[Cells]) -> Cells:
    """Cells of the same level one after the other; equal buckets become one."""
    if len({part.level_s for part in parts}) != 1:
        raise ValueError(f"cells have levels {sorted({part.level_s for part in parts})} s; concatenate takes one level.")
    histograms = [part.er_histogram for part in parts]
    offsets = np.cumsum([0, *(len(part) for part in parts)])
    joined = Cells(
        parts[0].level_s,
        np.concatenate([part.tap for part in parts]),
        np.concatenate([part.bucket_us for part in parts]),
        np.concatenate([part.values for part in parts]),
        Histogram(
            np.concatenate([one.cell + offset for one, offset in zip(histograms, offsets, strict=False)]),
            np.concatenate([one.bin for one in histograms]),
            np.concatenate([one.count for one in histograms]),
        ),
    )
    return merge(joined)


def empty_cells(level_s: int) -> Cells:
    """No cells."""
    nothing = np.zeros(0, dtype=np.int64)
    return Cells(level_s, nothing, nothing, np.zeros(0, dtype=CELL), histogram_of(np.zeros(0), nothing, 0))


def _group_starts(tap: IntArray, bucket_us: IntArray) -> IntArray:
    changes = (np.diff(tap) != 0) | (np.diff(bucket_us) != 0)
    return np.flatnonzero(np.concatenate([np.ones(min(1, len(tap)), dtype=bool), changes]))


def _count_trust(
    values: NDArray[Any], position: int, trust: NDArray[np.uint8], usable: BoolArray, hold_us: IntArray, groups: Groups
) -> None:
    trusted = usable & (trust == Trust.TRUSTED)
    values["trusted"][:, position] = groups.sums(trusted)
    values["doubtful"][:, position] = groups.sums(usable) - values["trusted"][:, position]
    values["untrusted"][:, position] = groups.sums((trust != Trust.NONE) & ~usable)
    values["trusted_us"][:, position] = groups.sums(np.where(trusted, hold_us, 0))


def _sum_ports(values: NDArray[Any], reduced: Reduced, usable: BoolArray, groups: Groups) -> None:
    """Signed net powers of usable ER samples, bounds included as they were read (unclipped)."""
    summed = usable & np.isfinite(reduced.wanted_power)
    values["er_count"] = groups.sums(usable)
    values["wanted_sum"] = groups.sums(np.where(summed, reduced.wanted_power, 0.0))
    values["other_sum"] = groups.sums(np.where(summed, reduced.other_power, 0.0))
    values["lower_bounds"] = groups.sums(usable & reduced.is_lower_bound)
    values["upper_bounds"] = groups.sums(usable & reduced.is_upper_bound)


def _fill_range(values: NDArray[Any], name: str, amount: FloatArray, usable: BoolArray, groups: Groups) -> None:
    shown = np.where(usable, amount, np.nan)
    values[f"{name}_min"], values[f"{name}_max"] = groups.minima(shown), groups.maxima(shown)


def _fill_moments(values: NDArray[Any], name: str, amount: FloatArray, usable: BoolArray, groups: Groups) -> None:
    """Range, count, mean and M2; all 0 where nothing was usable."""
    _fill_range(values, name, amount, usable, groups)
    if usable.any():
        _put_moments(values, name, group_moments(amount, usable, groups))


def _merge_moments(values: NDArray[Any], old: NDArray[Any], name: str, groups: Groups) -> None:
    parts = (old[f"{name}_{part}"] for part in ("count", "mean", "m2"))
    _put_moments(values, name, merged_moments(*parts, groups))


def _put_moments(values: NDArray[Any], name: str, moments: Moments) -> None:
    values[f"{name}_count"], values[f"{name}_mean"], values[f"{name}_m2"] = moments


def _sum_directions(values: NDArray[Any], reduced: Reduced, groups: Groups) -> None:
    if reduced.sop is None:
        return
    usable = usable_directions(reduced)
    sop = np.where(usable[:, None], reduced.sop, 0.0)
    polarized_w = reduced.power_w * reduced.dop
    weight = np.where(np.isfinite(polarized_w), polarized_w, 1.0)
    values["sop_count"] = groups.sums(usable)
    values["sop_sum"] = groups.sums(sop)
    values["stokes_sum"] = groups.sums(sop * weight[:, None])
