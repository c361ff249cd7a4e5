"""The last day of a tap as a short series: what a row's small curve is drawn from."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.record.rollup_pages import page_columns
from analysis.record.rollup_rows import HOUR_S, open_cells
from analysis.record.rollups import mean_names, means_of_cells
from ingest.times import SECOND_US

HOURS: Final = 24
_HOUR_US: Final = HOUR_S * SECOND_US


@dataclass(frozen=True, slots=True)
class Course:
    """Hourly means of ``quantity``, oldest first, None where there was no reading; the last hour is the present one."""

    quantity: str
    start_us: int
    bucket_s: float
    values: list[float | None]


def courses_of(quantities: Mapping[int, str], now_us: int) -> dict[int, Course]:
    """Courses of taps (tap id to quantity); two queries however many taps."""
    start_us = now_us // _HOUR_US * _HOUR_US - (HOURS - 1) * _HOUR_US
    ids = list(quantities)
    curves = {tap_id: np.full(HOURS, np.nan) for tap_id in ids}
    names = dict.fromkeys(name for quantity in quantities.values() for name in mean_names(quantity))
    for tap_id, columns in page_columns(ids, HOUR_S, list(names), start_us, start_us + HOURS * _HOUR_US):
        _fill(curves[tap_id], columns["bucket_us"], means_of_cells(quantities[tap_id], columns), start_us)
    rows = open_cells(ids, HOUR_S, start_us, start_us + HOURS * _HOUR_US)
    owners, begins = np.unique(rows.tap, return_index=True)
    for tap_id, begin, end in zip(owners.tolist(), begins.tolist(), np.append(begins, len(rows))[1:].tolist(), strict=True):
        quantity = quantities[tap_id]
        columns = {name: rows.values[name][begin:end] for name in mean_names(quantity)}
        _fill(curves[tap_id], rows.bucket_us[begin:end], means_of_cells(quantity, columns), start_us)
    return {
        tap_id: Course(
            quantities[tap_id], start_us, float(HOUR_S), [None if np.isnan(value) else value for value in curve.tolist()]
        )
        for tap_id, curve in curves.items()
    }


def _fill(curve: np.ndarray, bucket_us: np.ndarray, values: np.ndarray, start_us: int) -> None:
    index = (bucket_us - start_us) // _HOUR_US
    inside = (index >= 0) & (index < HOURS)
    curve[index[inside]] = values[inside]
