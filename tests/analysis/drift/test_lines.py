"""Spectral lines in uneven readings."""

import numpy as np
import pytest
from astropy.timeseries import LombScargle
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from analysis.drift.lines import Background, false_alarm_chance, find_lines, grid_power, power_at, single_chance
from tests.reference.generator import uniforms
from tests.reference.values import close, reference

S = 1_000_000


def series():
    """The series of T07-series."""
    i = np.arange(60)
    at_s = i + 0.4 * np.sin(1.7 * i)
    return at_s, 1.5 + np.cos(2 * np.pi * 0.11 * at_s + 0.4) + 0.8 * (2 * uniforms(61)[:60] - 1)


def test_the_reference_series_is_the_same():
    row = reference("T07-series")
    at_s, level = series()
    found = [at_s[1], at_s[59], level[0], level[59], level.mean(), level.var()]
    np.testing.assert_allclose(found, list(row["expected"].values()), **close(row))


def test_power_of_the_reference_series():
    """The model, log and psd forms follow from the standard power."""
    row = reference("T07-ls-norm")
    at_s, level = series()
    z = power_at(at_s, level, np.array([row["inputs"]["f"]]))[0]
    found = [z / (1 - z), -np.log(1 - z), 0.5 * z * np.sum((level - level.mean()) ** 2)]
    np.testing.assert_allclose(found, [row["expected"][name] for name in ("model", "log", "psd")], **close(row))


def test_highest_peak():
    row = reference("T07-peak")
    frequency = np.arange(0.05, 0.3, 1e-5)
    power = power_at(*series(), frequency)
    wanted = [row["expected"]["f"], row["expected"]["power"]]
    np.testing.assert_allclose([frequency[np.argmax(power)], power.max()], wanted, **close(row))


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(20, 200))
def test_fast_and_plain_power_are_astropys(seed, count):
    random = np.random.default_rng(seed)
    at_s, level = np.sort(random.uniform(0, 500, count)), random.normal(size=count)
    step_hz = 0.2 / (at_s[-1] - at_s[0])
    frequency = step_hz * np.arange(1, 301)
    expected = LombScargle(at_s, level, fit_mean=True).power(frequency, method="cython")
    np.testing.assert_allclose(grid_power(at_s, level, step_hz, 300), expected, atol=1e-7)
    np.testing.assert_allclose(power_at(at_s, level, frequency), expected, atol=1e-7)


def test_chance_at_one_frequency():
    row = reference("T07-fap-single")
    np.testing.assert_allclose(single_chance(np.array(row["inputs"]["z"]), row["inputs"]["N"]), row["expected"], **close(row))


@pytest.mark.parametrize("name", ["T07-fap-baluev", "T07-fap-mc-0.3"])
def test_chance_of_the_highest_peak(name):
    row = reference(name)
    found = false_alarm_chance(np.array(row["inputs"]["z"]), series()[0], row["inputs"]["fmax"])
    np.testing.assert_allclose(found, row["expected"], **close(row))


def search(seed, rho, background, *, line=0.0, gaps=True, count=1200):
    random = np.random.default_rng(seed)
    noise = signal.lfilter([1.0], [1.0, -rho], random.normal(size=count + 100))[100:]
    keep = random.random(count) < 0.8
    if gaps:
        keep[300:500] = False
    level = noise + line * np.sin(2 * np.pi * 0.04 * np.arange(count))
    return find_lines(np.flatnonzero(keep) * S, level[keep], high_hz=0.5, background=background, false_alarm=0.05, most=1)


def test_false_alarms_in_white_noise():
    share = np.mean([len(search(seed, 0.0, Background.WHITE).lines) for seed in range(150)])
    assert share <= 0.09


@pytest.mark.parametrize("rho", [0.0, 0.9, 0.99, 1.0])
def test_false_alarms_in_red_noise_with_gaps(rho):
    """White noise, AR(1) and a random walk, 5 % level: at most 9 % in 150 seeds."""
    share = np.mean([len(search(seed, rho, Background.RED).lines) for seed in range(150)])
    assert share <= 0.09


def test_red_noise_against_a_white_level_is_all_lines_and_says_so():
    found = [search(seed, 0.95, Background.WHITE) for seed in range(20)]
    assert np.mean([len(one.lines) for one in found]) > 0.8
    assert all(one.is_background_red for one in found)
    assert not any(search(seed, 0.0, Background.WHITE).is_background_red for seed in range(20))


def test_a_25_second_wave_is_found_in_red_noise():
    found = [search(seed, 0.9, Background.RED, line=2.0).lines for seed in range(30)]
    assert np.mean([len(lines) == 1 and abs(lines[0].period_s - 25.0) < 0.2 for lines in found]) > 0.9


def test_two_lines_with_their_errors():
    random = np.random.default_rng(1)
    errors = []
    for _ in range(100):
        at_s = np.sort(random.uniform(0, 2000, 600))
        level = 3.0 + 1.0 * np.sin(2 * np.pi * 0.02 * at_s) + 0.6 * np.sin(2 * np.pi * 0.11 * at_s + 1) + random.normal(size=600)
        lines = find_lines((at_s * S).astype(np.int64), level, high_hz=0.2).lines
        assert len(lines) >= 2
        for line, frequency, amplitude in zip(lines, (0.02, 0.11), (1.0, 0.6), strict=False):
            off_hz, off = line.frequency_hz - frequency, line.amplitude - amplitude
            errors.append([off_hz / line.frequency_se_hz, off / line.amplitude_se])
    np.testing.assert_allclose(np.std(errors, axis=0), 1.0, atol=0.2)


def test_a_strong_line_is_placed_far_within_the_grid():
    """Noise 1e-4 of the amplitude: the frequency is right to a thousandth of 1/T."""
    at_s = np.arange(2000.0)
    level = np.sin(2 * np.pi * 0.0412345 * at_s) + 1e-4 * np.random.default_rng(0).normal(size=2000)
    line = find_lines((at_s * S).astype(np.int64), level, high_hz=0.5, most=1).lines[0]
    assert line.frequency_hz == pytest.approx(0.0412345, abs=1e-3 / 2000) and line.amplitude == pytest.approx(1.0, abs=1e-3)


def test_flat_readings_and_wrong_settings():
    at_us = np.arange(100) * S
    assert find_lines(at_us, np.full(100, 2.0), high_hz=0.5).lines == ()
    with pytest.raises(ValueError, match="20 or more"):
        find_lines(at_us, np.where(at_us > 10 * S, np.nan, 1.0), high_hz=0.5)
    with pytest.raises(ValueError, match="12 per record"):
        find_lines(at_us, np.ones(100), high_hz=0.1)
    with pytest.raises(ValueError, match="one time per reading"):
        find_lines(at_us[1:], np.ones(100), high_hz=0.5)
