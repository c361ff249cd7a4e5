"""Slow statistics on measured records: a laboratory's air and a fibre's output.

Sources: uwarring82/Ba-Network (CC BY 4.0), commit b955b6b; F. Redza, polarisation_compensation, commit 87320b6. Figures:
recomputed independently with numpy and pandas, where another program gives one.
"""

import numpy as np
import pandas as pd
import pytest

from analysis.drift.arc import ArcVerdict
from analysis.drift.arc_sphere import fit_sphere_arc
from analysis.drift.hac import regress
from analysis.drift.lines import Background, find_lines
from analysis.drift.temperature import ResponseVerdict, temperature_response
from analysis.drift.trend import TrendVerdict, trend
from analysis.quantities import angle_between_rad
from tests.realdata.sets import table

pytestmark = pytest.mark.realdata


@pytest.fixture(scope="module")
def air():
    rows = table("lab_climate_gaps/climate_11d.csv.gz")
    at = pd.to_datetime(rows["time_utc"], format="ISO8601", utc=True).dt.tz_localize(None).to_numpy().astype("datetime64[us]")
    return at.astype(np.int64), rows


def test_index_of_air_on_temperature_humidity_and_pressure(air):
    """Joint slopes; alone, the temperature's slope is more than twice as steep, because humidity follows it."""
    _, rows = air
    columns = [rows[name].to_numpy() for name in ("temperature_c", "humidity_pct", "pressure_hpa")]
    number, index = np.arange(len(rows)), rows["n_1762"].to_numpy() - 1.0
    scaled = [column - column.mean() for column in columns]
    joint = regress(number, np.stack([np.ones(len(rows)), *scaled], axis=1), index * 1e6)
    np.testing.assert_allclose(joint.coefficient[1:] * 1e-6, [-9.767e-7, -1.958e-8, 2.591e-7], rtol=1e-3)
    alone = regress(number, np.stack([np.ones(len(rows)), scaled[0]], axis=1), index * 1e6)
    assert alone.coefficient[1] * 1e-6 == pytest.approx(-2.1965e-6, rel=1e-3)
    assert alone.standard_error[1] > 3 * joint.standard_error[1]


def test_the_index_falls_with_the_temperature_and_the_lag_is_left_open(air):
    """Eleven days with gaps are worth some 30 pairs: the slope is that of the temperature alone, the lag may be 0 or an hour."""
    at_us, rows = air
    found = temperature_response(at_us, rows["n_1762"].to_numpy() * 1e6, at_us, rows["temperature_c"].to_numpy(),
                                 bin_s=300, longest_lag_s=7200)
    assert found.verdict is ResponseVerdict.SHOWN and 20 < found.effective_pairs < 60 < found.pairs
    assert found.per_k == pytest.approx(-2.1965, abs=2 * found.per_k_se)
    assert found.lag_low_s == 0.0 and found.lag_high_s > 3600


def test_air_of_eleven_days_is_red_and_has_no_certain_hourly_line(air):
    """Against white noise everything slow is a line; the search says so itself."""
    at_us, rows = air
    temperature = rows["temperature_c"].to_numpy()
    white = find_lines(at_us, temperature, high_hz=1 / 600, most=3)
    red = find_lines(at_us, temperature, high_hz=1 / 600, background=Background.RED, most=3)
    assert white.is_background_red and len(white.lines) == 3
    assert len(red.lines) <= len(white.lines)


def test_weather_is_too_short_for_a_trend(air):
    """Pressure wanders over days: 27 means of 6 h are worth under 5 independent ones, and no slope is given."""
    at_us, rows = air
    found = trend(at_us, rows["pressure_hpa"].to_numpy(), 6 * 3600)
    assert found.verdict is TrendVerdict.TOO_SHORT and found.bins > 20 and np.isnan(found.per_day)


def circle_of(name):
    rows = table(f"fibre_sop_runs/run_{name}.csv.gz")
    at_us = np.round(rows["t_s"].to_numpy() * 1e6).astype(np.int64)
    return fit_sphere_arc(at_us, rows[["S1_mw", "S2_mw", "S3_mw"]].to_numpy(), np.array([1.0, 0.0, 0.0]))


def test_three_runs_of_one_fibre_lie_on_one_circle():
    """Runs a, b and c were taken apart; their circles agree in axis within 4° and in radius within 2°."""
    found = [circle_of(name) for name in "abc"]
    assert all(arc.verdict is ArcVerdict.MEASURED and arc.half_arc_rad > 2.5 for arc in found)
    apart = [np.degrees(float(angle_between_rad(found[0].axis, arc.axis))) for arc in found]
    assert max(apart) < 4.0
    assert np.ptp([np.degrees(arc.radius_rad) for arc in found]) < 2.0
