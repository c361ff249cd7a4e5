"""Zeros, worth of correlated readings, clocks.

Certified values of open data, and figures of other libraries computed in the same run.
"""

import numpy as np
from scipy import stats

from analysis.drift.tap_statistics import mean_error
from analysis.reduce.zero import port_zero
from ingest.clock_course import clock_course
from tests.reference.published.case import Case, Origin
from tests.reference.values import reference

_STRD = "NIST Statistical Reference Datasets, certified value, set "


def _cases() -> list[Case]:
    cases = []
    for data in ("Michelso", "Mavro", "Lew"):
        row = reference(f"T11-strd-{data}")
        values = np.array(row["inputs"]["data"], float)
        for key, words in (("mean", "zero"), ("sd", "spread of a reading")):
            field = {"mean": "mean", "sd": "sigma"}[key]
            cases.append(Case(
                name=f"F115-{data}-{key}", quantity=f"{words} of readings {data}", published=row["expected"][key], unit="",
                tolerance=1e-11 * max(1.0, abs(row["expected"]["mean"])), formula="F-115", source=_STRD + data,
                origin=Origin.READ,
                compute=lambda values=values, field=field: getattr(port_zero(values, None), field)))  # fmt: skip
    return [*cases, _independent(), _skew()]


def _independent() -> Case:
    """Alternating readings, whose autocorrelation narrows nothing: the plain standard error."""
    values = np.tile([1.0, 2.0], 500)
    return Case(
        name="F118-sem", quantity="standard error of the mean of 1000 alternating readings", unit="", tolerance=1e-15,
        published=float(stats.sem(values)), formula="F-118", source="scipy.stats.sem", origin=Origin.LIBRARY,
        compute=lambda: mean_error(np.arange(1000) * 1_000_000, values).standard_error)  # fmt: skip


def _skew() -> Case:
    """A way that is always the same: the lows' line is the line of all batches."""
    arrival_us = np.arange(1200, dtype=np.int64) * 1_000_000
    sent_us = arrival_us - (20_000 + 40 * np.arange(1200)).astype(np.int64)
    line = stats.linregress(arrival_us / 1e6, (arrival_us - sent_us) / 1e6)

    def computed() -> float:
        course = clock_course(arrival_us, sent_us)
        return np.nan if course is None or course.skew_ppm is None else course.skew_ppm

    return Case(
        name="F119-skew", quantity="skew of a clock through a steady network", unit="ppm", tolerance=1e-6,
        published=1e6 * float(line.slope), formula="F-119", source="scipy.stats.linregress of every batch", origin=Origin.LIBRARY,
        compute=computed)  # fmt: skip


CASES = _cases()
