"""What recent drift says, against worked cases, published laws and the slower model beside it."""

import numpy as np
import pytest

from analysis.outlook.mean_reverting import reverting_passage
from analysis.outlook.recent_drift import BINS, FEWEST, recent_drift
from analysis.outlook.time_to_limit import time_to_limit

BIN_S = 300.0
HOUR_S = 3600.0


def walks(rng, count, *, sigma=0.3, drift=0.0, bins=BINS):
    """Walks of ``bins`` steps, degrees, starting at 10°."""
    return 10.0 + np.cumsum(rng.normal(drift, sigma, (count, bins)), axis=1)


def last_of(records, limit_deg):
    """The last moment of each record, all in one call with gaps between: (median, tenth, turns back)."""
    apart = np.hstack([np.full((len(records), BINS), np.nan), records])
    limits = np.broadcast_to(np.reshape(limit_deg, (-1, 1)), apart.shape)
    found, ends = recent_drift(apart.ravel(), BIN_S, limits.ravel()), np.arange(1, len(records) + 1) * apart.shape[1] - 1
    return found.median_s[ends], found.tenth_s[ends], found.turns_back[ends]


def test_two_degrees_an_hour_with_four_left():
    """4° at 2° an hour is 2 h, from the middle of the last bin."""
    angle = 3.0 + 2.0 * np.arange(40) * BIN_S / HOUR_S
    found = recent_drift(angle, BIN_S, angle[-1] + 4.0)
    assert found.median_s[-1] == pytest.approx(2 * HOUR_S - BIN_S / 2, abs=1.0) and not found.turns_back[-1]


def test_falling_and_beyond():
    angle = 12.0 - 2.0 * np.arange(40) * BIN_S / HOUR_S
    assert np.isinf(recent_drift(angle, BIN_S, 13.0).median_s[-1])
    assert recent_drift(angle, BIN_S, 3.0).median_s[-1] == 0.0


def test_nothing_is_said_before_there_is_enough_or_in_a_gap():
    angle = np.full(60, 5.0)
    angle[50] = np.nan
    found = recent_drift(angle, BIN_S, 10.0)
    assert found.is_known.tolist() == [False] * (FEWEST - 1) + [True] * (50 - FEWEST + 1) + [False] + [True] * 9
    assert not recent_drift(angle, BIN_S, np.nan).is_known.any()
    assert np.isinf(found.median_s[-1]) and np.isnan(found.median_s[50])


def test_a_gap_counts_with_its_time():
    angle = 3.0 + 2.0 * np.arange(40) * BIN_S / HOUR_S
    holed = angle.copy()
    holed[20:28] = np.nan
    assert recent_drift(holed, BIN_S, 12.0).median_s[-1] == pytest.approx(recent_drift(angle, BIN_S, 12.0).median_s[-1], abs=1.0)


def test_a_walk_is_refuted_as_often_as_the_table_says():
    """W. A. Fuller, Introduction to Statistical Time Series (1976), table 8.5.2, τ_μ: 5 % below -3.00 (25), -2.93 (50).

    From memory.

    At 36 steps a test at -3.00 refutes a little less than 5 % of walks.
    """
    _, _, turned = last_of(walks(np.random.default_rng(1), 3000), 1e6)
    assert 0.030 < turned.mean() < 0.055


def passed_after_s(rng, drift, distance, fine=30):
    """When walks with 0.3° a bin pass a limit so far off, s from the end of the last bin; inf: not within the window."""
    place, passed_s = np.zeros(len(drift)), np.full(len(drift), np.inf)
    for step in range(BINS * fine):
        place += drift / fine + rng.normal(0, 0.3 / np.sqrt(fine), len(drift))
        passed_s = np.where((place >= distance) & np.isinf(passed_s), (step + 1) * BIN_S / fine, passed_s)
    return passed_s - BIN_S / 2


@pytest.mark.parametrize(("prior", "by_tenth", "by_median"), [(0.4, 0.118, 0.514), (0.05, 0.108, 0.333), (0.0, 0.078, 0.096)])
def test_how_many_walks_are_there_by_the_times_told(prior, by_tenth, by_median):
    """Simulated truth: walks of 0.3° a bin with a drift of their own (N(0, prior), ° a bin), the limit 2.5° off.

    "One in ten sooner than" holds whatever the drift. The median holds for a drift that is there; of walks without one, which
    look like drifting at 5 % of moments, one in ten comes. So a warning on the median is as good as the drifts of a bench
    are real: what the back-test beside it counts. (Shares: this simulation, 6000 walks, another seed.)
    """
    rng, count = np.random.default_rng(21), 3000
    drift = rng.normal(0.0, prior, count)
    past = 10.0 + np.cumsum(drift[:, None] + rng.normal(0, 0.3, (count, BINS)), axis=1)
    median_s, tenth_s, turned = last_of(past, past[:, -1] + 2.5)
    passed_s = passed_after_s(rng, drift, 2.5)
    for told_s, share in ((tenth_s, by_tenth), (median_s, by_median)):
        is_told = np.isfinite(told_s) & ~turned
        came = np.mean(passed_s[is_told] <= told_s[is_told])
        assert is_told.sum() > 100 and came == pytest.approx(share, abs=4 * np.sqrt(share * (1 - share) / is_told.sum()))


def test_light_that_turns_back_against_the_exact_law():
    """An Ornstein-Uhlenbeck level 2.5 of its own sd below its limit: median and tenth within a third of F-99's law."""
    rng, rate_per_s, sd = np.random.default_rng(9), 1.0 / 900.0, 0.5
    kept = np.exp(-rate_per_s * BIN_S)
    record = np.empty(4000)
    record[0] = 5.0
    for index in range(1, len(record)):
        record[index] = 5.0 + kept * (record[index - 1] - 5.0) + rng.normal(0, sd * np.sqrt(1 - kept**2))
    limit = 5.0 + 2.5 * sd
    found = recent_drift(record, BIN_S, limit)
    law = reverting_passage(5.0, limit, 5.0, rate_per_s, sd)
    exact_s = float(law.quantile_s([0.1], horizon_s=1e7)[0])
    near_mean = found.turns_back & (np.abs(found.angle_deg - 5.0) < 0.2) & np.isfinite(found.tenth_s)
    assert near_mean.sum() > 200
    assert np.median(found.tenth_s[near_mean]) == pytest.approx(exact_s, rel=0.5)


def test_cycles_of_the_air_are_not_taken_for_drift():
    """±2° each 22 min about 5°, the limit at 11.4°: nothing is told, at any phase."""
    at_s = np.arange(400) * BIN_S
    angle = 5.0 + 2.0 * np.sin(2 * np.pi * at_s / 1320.0) + np.random.default_rng(3).normal(0, 0.1, 400)
    found = recent_drift(angle, BIN_S, 11.4)
    assert np.isinf(found.median_s[found.is_known]).all()


def test_the_slower_model_says_the_same_of_a_ramp():
    rng = np.random.default_rng(4)
    angle = 4.0 + 2.0 * np.arange(BINS) * BIN_S / HOUR_S + rng.normal(0, 0.05, BINS)
    slow = time_to_limit(np.arange(BINS) * BIN_S, angle, 12.0, horizon_s=BINS * BIN_S)
    found = recent_drift(angle, BIN_S, 12.0)
    assert found.median_s[-1] == pytest.approx(slow.median.time_s - BIN_S / 2, rel=0.02)


def test_shapes():
    with pytest.raises(ValueError, match="one angle a bin"):
        recent_drift(np.zeros((2, 2)), BIN_S, 1.0)
    with pytest.raises(ValueError, match="more than 0 s"):
        recent_drift(np.zeros(2), 0.0, 1.0)
    assert len(recent_drift(np.zeros(0), BIN_S, 1.0).median_s) == 0
