"""Robust trend."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal, stats

from analysis.drift.trend import TrendVerdict, leak_trend_db, trend

HOUR_US, DAY_US = 3_600_000_000, 86_400_000_000


def test_slope_and_interval_of_independent_readings_are_theil_sens():
    """scipy.stats.theilslopes, for noise whose autocorrelation widens nothing."""
    for seed in range(30):
        level = np.random.default_rng(seed).normal(size=60) + 0.02 * np.arange(60)
        found = trend(np.arange(60) * DAY_US, level, 86_400)
        slope, _, low, high = stats.theilslopes(level, np.arange(60), 0.95)
        assert found.per_day == pytest.approx(slope, rel=1e-9)
        if found.effective_bins == 60:
            assert (found.low_per_day, found.high_per_day) == (pytest.approx(low, rel=0.02), pytest.approx(high, rel=0.02))
            break
    else:
        pytest.fail("no seed without autocorrelation")


@pytest.mark.parametrize(("rho", "count"), [(0.0, 40), (0.6, 100), (0.8, 200)])
def test_noise_without_a_trend_shows_one_in_5_percent(rho, count):
    noise = signal.lfilter([1.0], [1.0, -rho], np.random.default_rng(1).normal(size=(250, count + 50)), axis=1)[:, 50:]
    shown = [trend(np.arange(count) * HOUR_US, row, 3600).verdict in (TrendVerdict.RISING, TrendVerdict.FALLING) for row in noise]
    assert np.mean(shown) < 0.09


def test_creep_of_5_percent_a_week_under_a_daily_cycle_is_seen_by_day_14():
    """Acceptance of the job: mean leak +5 %/week (0.212 dB) under ±2 dB a day, with the crossing as a range."""
    at_us = np.arange(14 * 24 * 60) * 60_000_000
    day = at_us / DAY_US
    random = np.random.default_rng(2)
    shown = []
    for _ in range(20):
        nightly = np.repeat(random.normal(size=14), 1440)
        noise = 1 + 0.01 * nightly + 0.05 * random.normal(size=len(day))
        leak = 1e-3 * 1.05 ** (day / 7) * 10 ** (0.2 * np.sin(2 * np.pi * day)) * noise
        found = leak_trend_db(at_us, np.full(len(day), 1e-3), leak * 1e-3, 86_400)
        truth = 10 * np.log10(1.05) / 7
        shown.append(found.verdict is TrendVerdict.RISING and found.low_per_day <= truth <= found.high_per_day)
        early, late = found.reaches_us(found.level + 1.0)
        days = 1.0 / np.array([found.high_per_day, found.low_per_day])
        np.testing.assert_allclose((np.array([early, late]) - found.middle_us) / DAY_US, days, rtol=1e-9)
    assert np.mean(shown) >= 0.9


def test_powers_are_summed_before_the_decibel():
    """20 and 40 dB in one bin make 22.97 dB, not 30 (F-16)."""
    at_us = np.arange(20) * DAY_US // 2
    other = np.where(np.arange(20) % 2, 1e-4, 1e-2)
    assert leak_trend_db(at_us, np.ones(20), other, 86_400).level == pytest.approx(-22.967, abs=1e-3)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10_000), st.floats(-5, 5), st.floats(0.1, 10))
def test_scale_and_offset_pass_through(seed, offset, scale):
    random = np.random.default_rng(seed)
    at_us = np.sort(random.choice(np.arange(100), 40, replace=False)) * DAY_US
    level = random.normal(size=40)
    one, other = trend(at_us, level, 86_400), trend(at_us, offset + scale * level, 86_400)
    wanted = [scale * one.per_day, scale * one.low_per_day]
    np.testing.assert_allclose([other.per_day, other.low_per_day], wanted, rtol=1e-6, atol=1e-9)
    assert other.effective_bins == pytest.approx(one.effective_bins, rel=1e-6)


def test_a_fifth_of_wild_readings_hardly_moves_it():
    random = np.random.default_rng(3)
    level = 0.1 * np.arange(100) + random.normal(size=100)
    level[random.choice(100, 20, replace=False)] += 100.0
    assert trend(np.arange(100) * DAY_US, level, 86_400).per_day == pytest.approx(0.1, abs=0.05)


def test_short_records_say_so():
    assert trend(np.arange(7) * DAY_US, np.arange(7.0), 86_400).verdict is TrendVerdict.TOO_SHORT
    wave = np.sin(2 * np.pi * np.arange(12) / 11)
    found = trend(np.arange(12) * DAY_US, wave, 86_400)
    assert found.verdict is TrendVerdict.TOO_SHORT and np.isnan(found.per_day) and found.effective_bins < 5
    assert trend(np.zeros(0, np.int64), np.zeros(0), 60).bins == 0


def test_gaps_keep_their_length_and_thin_bins_are_left_out():
    at_us = np.concatenate([np.arange(20 * 24), np.arange(60 * 24, 80 * 24), [90 * 24]]) * HOUR_US
    found = trend(at_us, at_us / DAY_US * 0.3, 86_400)
    assert found.per_day == pytest.approx(0.3, rel=1e-9) and found.bins == 40


def test_wrong_bins_are_refused():
    with pytest.raises(ValueError, match="bin_s=0"):
        trend(np.arange(3), np.zeros(3), 0)
    with pytest.raises(ValueError, match="2000 is the most"):
        trend(np.arange(3000) * DAY_US, np.zeros(3000), 86_400)
    with pytest.raises(ValueError, match="one time per reading"):
        trend(np.arange(3), np.zeros(4), 1)
