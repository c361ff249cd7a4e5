"""Air of an optics laboratory, irregular and with gaps: figures with the gaps respected.

Source: uwarring82/Ba-Network (public repository, CC BY 4.0), commit b955b6b, "Atmospheric Metrology for Quantum Networks";
columns renamed. Figures: recomputed independently with numpy and pandas.
"""

import numpy as np
import pandas as pd
import pytest

from analysis.drift.bins import bin_means
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from analysis.rollup.cells import cells_of, holds_us, merge
from analysis.rollup.history import history_of
from tests.realdata.sets import table
from tests.reference.aligned import aligned

pytestmark = pytest.mark.realdata
INTERVAL_S = 13.317


@pytest.fixture(scope="module")
def rows():
    return table("lab_climate_gaps/climate_11d.csv.gz")


@pytest.fixture(scope="module")
def air(rows):
    at_us = pd.to_datetime(rows["time_utc"], format="ISO8601", utc=True).dt.tz_localize(None).to_numpy().astype("datetime64[us]")
    columns = {name: rows[name].to_numpy() for name in ("temperature_c", "humidity_pct", "pressure_hpa")}
    return reduce_tap("climate", "", at_us.astype(np.int64), columns, TapCalibration())


def test_rows_spacing_and_gaps(air):
    spacing_s = np.diff(air.at_us) / 1e6
    assert len(air) == 14_104
    assert np.median(spacing_s) == pytest.approx(INTERVAL_S, abs=5e-4)
    assert ((spacing_s > 60).sum(), (spacing_s > 3600).sum()) == (1715, 17)
    assert spacing_s.max() / 3600 == pytest.approx(30.685, abs=5e-4)


@pytest.mark.parametrize(
    ("tau_s", "deviation_k", "pairs", "if_closed_up"),
    [
        (60, 0.014583, 4105, 0.037083),
        (300, 0.029352, 1518, 0.062568),
        (900, 0.051491, 636, 0.102176),
        (3600, 0.155986, 180, 0.216711),
    ],
)
def test_allan_deviation_of_temperature(air, tau_s, deviation_k, pairs, if_closed_up):
    assert aligned(air.at_us, air.temperature_c, tau_s) == (pytest.approx(deviation_k, abs=1e-6), pairs)
    _, means = bin_means(air.at_us, air.temperature_c, tau_s * 1_000_000)
    closed_up = np.sqrt(np.mean(np.diff(means) ** 2) / 2)
    assert closed_up == pytest.approx(if_closed_up, abs=1e-6)  # the wrong figure that closing the gaps up gives


def test_rollups_show_gaps_as_gaps(air):
    """Every hour without a reading has no cell; the longest silence is 30 whole hours."""
    minutes = cells_of(air, 60, holds_us(air.at_us, INTERVAL_S))
    hours = merge(minutes, 3600)
    missing = np.diff(hours.bucket_us) // 3_600_000_000 - 1
    assert missing.max() in (29, 30)
    history = history_of(hours, "temperature_c")
    assert history.min.min() == air.temperature_c.min() and history.max.max() == air.temperature_c.max()
    hour = hours.bucket_us[0] <= air.at_us
    first = air.temperature_c[hour & (air.at_us < hours.bucket_us[0] + 3_600_000_000)]
    np.testing.assert_allclose(history.mean[0], first.mean(), rtol=1e-12)
    assert np.average(history.trusted_share) < 0.75
