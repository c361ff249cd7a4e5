"""A tap's span in one call: each figure is that of its own module, and means of correlated readings are worth less."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift.arc import ArcVerdict
from analysis.drift.arc_leak import fit_leak_arc
from analysis.drift.tap_statistics import Temperature, mean_error, tap_statistics, temperatures_at
from analysis.drift.temperature import ResponseVerdict
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from tests.analysis.drift.fibre_course import leak_course
from tests.analysis.drift.test_night import START_US, stokes_night

HORIZONTAL = np.array([1.0, 0.0, 0.0])


def two_port_day(half_arc_rad=2.0):
    at_us, leak, temperature, worst_db = leak_course(3, half_arc_rad=half_arc_rad)
    at_us = at_us + START_US
    columns = {"port1": np.full(len(at_us), 1e-3), "port2": 1e-3 * leak, "temperature_c": temperature}
    return at_us, leak, temperature, worst_db, reduce_tap("two-port", "W", at_us, columns, TapCalibration())


def test_two_ports_show_the_worst_er_of_the_fibre():
    """The true worst ER of the invented fibre (ends misaligned by 1.5 deg each: sin² of their sum) lies in the band."""
    at_us, leak, temperature, worst_db, reduced = two_port_day()
    found = tap_statistics(reduced, temperature=Temperature(at_us, temperature))
    assert found.arc.verdict is ArcVerdict.MEASURED
    assert found.arc.worst.low_db - 0.1 <= worst_db <= found.arc.worst.high_db + 0.1
    alone = fit_leak_arc(at_us, leak, temperature)
    assert found.arc.worst.er_db == pytest.approx(alone.worst.er_db, abs=1e-6)
    assert found.arc.kappa_high_rad_per_k == pytest.approx(alone.kappa_high_rad_per_k, rel=1e-6)
    assert found.leak_mean_low_db < found.night.er.leak_mean_db < found.leak_mean_high_db
    assert found.leak_trend.bins >= 40


def test_a_short_arc_is_not_told_as_a_worst_er():
    at_us, _, temperature, _, reduced = two_port_day(half_arc_rad=0.3)
    found = tap_statistics(reduced, temperature=Temperature(at_us, temperature))
    assert found.arc.verdict is not ArcVerdict.MEASURED


def test_stokes_vectors_have_an_arc_without_temperatures_and_no_response():
    _, reduced = stokes_night()
    found = tap_statistics(reduced, wanted_state=HORIZONTAL)
    assert found.response is None and found.arc.readings == len(reduced)
    assert tap_statistics(reduced).arc is None


def test_a_walk_that_knows_nothing_of_the_air_shows_no_relation():
    _, reduced = stokes_night()
    air = 21.0 + np.sin(2 * np.pi * np.arange(len(reduced)) / 700.0)
    found = tap_statistics(reduced, temperature=Temperature(reduced.at_us, air))
    assert found.response.verdict is not ResponseVerdict.SHOWN


def test_fewer_than_two_samples_are_refused_with_a_remedy():
    _, reduced = stokes_night(count=7000)
    with pytest.raises(ValueError, match="longer span"):
        tap_statistics(reduced.take(slice(0, 1)))


def test_independent_readings_have_the_textbook_error_of_the_mean():
    """s/√n (JCGM 100:2008, 4.2.3), from memory."""
    values = np.random.default_rng(4).standard_normal(50_000)
    found = mean_error(np.arange(50_000) * 1_000_000, values)
    assert found.standard_error == pytest.approx(values.std(ddof=1) / np.sqrt(50_000), rel=0.25)
    assert found.count == 50_000


def test_correlated_readings_are_worth_as_many_as_theory_says():
    """Mean of AR(1) readings: n (1 - ρ)/(1 + ρ) independent ones (Bartlett; F-70). Here ρ = 0.9: 1 in 19."""
    rng, count = np.random.default_rng(5), 100_000
    noise, values = rng.standard_normal(count), np.empty(count)
    values[0] = noise[0] / np.sqrt(1 - 0.81)
    for k in range(1, count):
        values[k] = 0.9 * values[k - 1] + noise[k]
    found = mean_error(np.arange(count) * 1_000_000, values)
    assert found.effective == pytest.approx(count / 19.0, rel=0.3)


def test_a_single_reading_has_no_error():
    found = mean_error(np.array([5]), np.array([1.0]))
    assert np.isnan(found.standard_error) and found.count == 1


@given(st.lists(st.integers(0, 10_000), min_size=1, max_size=30, unique=True), st.integers(-5000, 15_000))
def test_temperatures_between_readings_are_numpys_interpolation_or_nothing(times_s, asked_s):
    times_us = np.sort(np.array(times_s)) * 1_000_000
    degrees = 20.0 + 0.001 * np.array(sorted(times_s))
    asked_us = np.array([asked_s * 1_000_000])
    found = temperatures_at(asked_us, Temperature(times_us, degrees))[0]
    if np.abs(times_us - asked_us).min() > 600_000_000:
        assert np.isnan(found)
    else:
        assert found == pytest.approx(np.interp(asked_us, times_us, degrees)[0], abs=1e-12)


def test_without_temperatures_there_is_none_anywhere():
    assert np.isnan(temperatures_at(np.arange(3), Temperature(np.arange(2), np.full(2, np.nan)))).all()
