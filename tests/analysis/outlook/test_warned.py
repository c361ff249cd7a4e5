"""Scores of warnings: worked by hand, and against walks whose law of first passage is known."""

import numpy as np
import pytest
from scipy.stats import invgauss

from analysis.judge.fold import FoldState, episodes_of, fold
from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import Seconds
from analysis.outlook.recent_drift import BINS, recent_drift
from analysis.outlook.warned import Warned, passings_us, score_warnings

S, MINUTE_US, HOUR_US = 1_000_000, 60_000_000, 3_600_000_000


def day(hours=24):
    return np.arange(hours * 60) * MINUTE_US


def test_by_hand():
    """Passings at 5 h, 12 h. Warned at 4 h (within 2 h: true), 8 h (2 h: false), 10 h (1 h: false), 23 h (2 h: not over)."""
    warned = [Warned(4 * HOUR_US, 6 * HOUR_US, 7200.0), Warned(8 * HOUR_US, 9 * HOUR_US, 7200.0),
              Warned(10 * HOUR_US, None, 3600.0), Warned(23 * HOUR_US, None, 7200.0)]
    score = score_warnings(warned, np.array([5, 12]) * HOUR_US, day(), np.ones(1440, bool))
    assert (score.warnings, score.came_true, score.open_ended, score.passings, score.warned_of) == (3, 1, 1, 2, 2)
    assert score.leads_s.tolist() == [3600.0, 7200.0] and score.false_share == pytest.approx(2 / 3)
    assert score.false_interval == (pytest.approx(0.0943, abs=1e-4), pytest.approx(0.9916, abs=1e-4))  # Clopper-Pearson, 2 of 3


def test_a_silent_hour_leaves_the_outcome_open():
    is_read = np.ones(1440, bool)
    is_read[490:600] = False
    score = score_warnings([Warned(8 * HOUR_US, None, 7200.0)], np.array([], np.int64), day(), is_read)
    assert (score.warnings, score.open_ended) == (0, 1) and np.isnan(score.false_share)


def test_passings():
    angle = np.full(300, 5.0)
    angle[[100, 101, 120, 200]] = 12.0
    angle[250] = np.nan
    assert (passings_us(np.arange(300) * MINUTE_US, angle, np.full(300, 11.4)) // MINUTE_US).tolist() == [100, 200]
    assert len(passings_us(np.arange(300) * MINUTE_US, angle, np.full(300, np.nan))) == 0


def test_as_many_come_true_as_the_law_of_first_passage_says():
    """Simulated truth: walks with a known drift and spread. At each warning the chance that it comes true is that of the Wiener
    process with drift (inverse Gaussian law, scipy.stats.invgauss), given where the walk stands; their sum is the expected count.
    """
    rng, bin_s, limit, records = np.random.default_rng(17), 300.0, 12.0, 400
    drift, sigma = 1.0 / 3600.0, 0.4 / np.sqrt(3600.0)
    rule = LimitRule(quantity=Quantity.TIME_TO_LIMIT_S, alarm=3600.0, warning=7200.0, on_delay_s=600.0, off_delay_s=900.0,
                     deadband=1800.0)
    expected, variance, warnings, came_true = 0.0, 0.0, 0, 0
    for _ in range(records):
        fine = 6.0 + np.cumsum(rng.normal(drift * 10.0, sigma * np.sqrt(10.0), 12 * 360))  # readings each 10 s
        angle = fine.reshape(-1, 6).mean(axis=1)
        minute_us = np.arange(len(angle)) * MINUTE_US
        found = recent_drift(fine.reshape(-1, 30).mean(axis=1), bin_s, limit)
        known = found.is_known & (found.median_s > 0)
        end_us = (np.flatnonzero(known) + 1) * 300 * S - S
        value, ok = found.median_s[known], np.ones(known.sum(), bool)
        seconds = Seconds(Quantity.TIME_TO_LIMIT_S, bin_s, end_us, value, value, value, ok, ~ok, np.ones(len(value), np.int64))
        first = episodes_of(fold(rule, FoldState(), seconds, bin_s)[1])[:1]
        passed = passings_us(minute_us, angle, np.full(len(angle), limit))
        for one in first:
            within_s = rule.alarm if one.alarm_us == one.raised_us else rule.warning
            here = fine[(one.raised_us + S) // (10 * S) - 1]
            if (one.raised_us + within_s * S) > minute_us[-1] or here >= limit:
                continue
            warned = Warned(one.raised_us, one.returned_us, within_s)
            score = score_warnings([warned], passed, minute_us, np.ones(len(angle), bool))
            shape = ((limit - here) / sigma) ** 2
            chance = invgauss.cdf(within_s, mu=(limit - here) / drift / shape, scale=shape)
            expected, variance = expected + chance, variance + chance * (1 - chance)
            warnings, came_true = warnings + 1, came_true + score.came_true
    assert warnings > 150 and BINS == 36
    # Minutes' means pass a little later than the walk itself: 1.5 % of the warnings are allowed for that.
    assert came_true == pytest.approx(expected, abs=3.5 * np.sqrt(variance) + 0.015 * warnings)
