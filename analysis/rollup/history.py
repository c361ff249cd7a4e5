"""Cells to the curves of a history picture."""

from dataclasses import dataclass

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import US_PER_S, FloatArray, IntArray, db_from_ratio
from analysis.reduce.trust import QUANTITIES
from analysis.rollup.cells import AIR, Cells


@dataclass(frozen=True, slots=True)
class History:
    """Curves of M buckets, shape (M,), NaN where undefined.

    Attributes:
        at_us: Start of the bucket.
        min, mean, max: In the quantity's unit (angle in degrees). The mean of ER is the ER of the summed port powers,
            NaN where a sum is not above 0 (min and max may still be known).
        trusted_share: Share of the bucket's length covered by trusted samples, 0 to 1 (of air quantities: by samples).
    """

    at_us: IntArray
    min: FloatArray
    mean: FloatArray
    max: FloatArray
    trusted_share: FloatArray


def history_of(cells: Cells, quantity: Quantity | str) -> History:
    """Curves of a judged quantity or of ``temperature_c``, ``humidity_pct``, ``pressure_hpa``."""
    name = str(quantity)
    values = cells.values
    if name in AIR:
        covered_us, mean = values["covered_us"], _mean(values[f"{name}_mean"] * values[f"{name}_count"], values[f"{name}_count"])
        covered_us = np.where(values[f"{name}_count"] > 0, covered_us, 0)
    else:
        quantity = Quantity(name)
        covered_us, mean = values["trusted_us"][:, QUANTITIES.index(quantity)], _means(cells, quantity)
    share = np.minimum(covered_us / (cells.level_s * US_PER_S), 1.0)
    return History(cells.bucket_us, values[f"{name}_min"], mean, values[f"{name}_max"], share)


def mean_er_db(cells: Cells) -> FloatArray:
    """ER of sums, dB; NaN where either sum is not above 0."""
    wanted, other = cells.values["wanted_sum"], cells.values["other_sum"]
    both = (wanted > 0.0) & (other > 0.0)
    return db_from_ratio(np.where(both, wanted, np.nan) / np.where(both, other, np.nan))


def _means(cells: Cells, quantity: Quantity) -> FloatArray:
    values = cells.values
    if quantity is Quantity.ER_DB:
        return mean_er_db(cells)
    if quantity is Quantity.ANGLE_DEG:
        return _mean(values["angle_deg_sum"], values["angle_count"])
    if quantity is Quantity.DOP:
        return _mean(values["dop_sum"], values["dop_count"])
    return np.where(values["power_w_count"] > 0, values["power_w_mean"], np.nan)


def _mean(total: FloatArray, count: IntArray) -> FloatArray:
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)
