"""Derived quantities from minutes: worked shares, silences, levels in force, and that cutting changes nothing."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.derived import (
    MINUTE_US,
    Minutes,
    bin_us,
    drift_of,
    last_window,
    levels_deg,
    look_back_us,
    share_seconds,
    time_seconds,
    whole_bins,
)
from analysis.judge.phases import phases_of
from analysis.judge.rule import LimitRule, Quantity

S = 1_000_000
SHARE, AHEAD = Quantity.TRUSTED_SHARE, Quantity.TIME_TO_LIMIT_S


def minutes(trusted_s, angle_deg=5.0, from_us=0):
    """Minutes with so many trusted seconds each (None: nothing was read)."""
    count = np.array([0 if one is None else 60 for one in trusted_s])
    trusted_us = np.array([0 if one is None else one * S for one in trusted_s], np.int64)
    return Minutes(from_us, count, trusted_us, np.broadcast_to(angle_deg, len(count)) * count, count)


def cut(whole, from_us, until_us):
    low, high = ((at_us - whole.from_us) // MINUTE_US for at_us in (from_us, until_us))
    return Minutes(from_us, *(column[low:high] for column in (whole.count, whole.trusted_us, whole.angle_sum, whole.angle_count)))


def test_the_share_of_the_window():
    found = share_seconds(minutes([60] * 10 + [0] * 3 + [30]), 600.0, 0)
    assert found.entry_s == 60.0 and found.at_us[0] == MINUTE_US - S
    assert found.is_judged.tolist() == [False] * 9 + [True] * 5
    np.testing.assert_allclose(found.worst[9:], [1.0, 0.9, 0.8, 0.7, 0.65])


def test_minutes_without_reading_count_as_not_trusted_and_make_no_entry():
    found = share_seconds(minutes([60] * 10 + [None] * 2 + [60]), 600.0, 0)
    assert len(found) == 11 and found.worst[-1] == pytest.approx(0.8)


def test_a_silence_as_long_as_the_window_starts_anew():
    short, long = (share_seconds(minutes([60] * 10 + [None] * silent + [60] * 12), 600.0, 0) for silent in (9, 10))
    assert short.is_judged[10:].all() and short.worst[10] == pytest.approx(0.1)
    assert long.is_judged[10:].tolist() == [False] * 9 + [True] * 3 and long.worst[-1] == 1.0


@given(st.lists(st.none() | st.integers(0, 60), min_size=30, max_size=120), st.integers(0, 29))
def test_where_the_minutes_begin_changes_no_share(trusted_s, start):
    """What lies further back than `look_back_us` says has no part in it."""
    whole = minutes(trusted_s)
    from_us = start * MINUTE_US
    first_us = max(from_us - look_back_us(SHARE, 300.0), 0)
    one, other = share_seconds(whole, 300.0, from_us), share_seconds(cut(whole, first_us, whole.until_us), 300.0, from_us)
    if first_us > 0:
        np.testing.assert_array_equal(one.worst, other.worst)
        np.testing.assert_array_equal(one.at_us, other.at_us)


@given(st.integers(0, 2**31), st.integers(40, 70))
def test_where_the_minutes_begin_changes_no_time(seed, bins):
    rng = np.random.default_rng(seed)
    angle = np.abs(8.0 + np.cumsum(rng.normal(0, 0.05, bins * 5)))
    whole = minutes([60] * len(angle), angle)
    hosts = [phases_of([(1, LimitRule(quantity=Quantity.ANGLE_DEG, alarm=11.0), 0, False, False)])]
    from_us = (bins - 3) * bin_us(None)
    part = whole_bins(cut(whole, from_us - look_back_us(AHEAD, None), whole.until_us), None)
    one, other = (time_seconds(*drift_of(each, None, hosts), None, from_us) for each in (whole_bins(whole, None), part))
    np.testing.assert_array_equal(one.at_us, other.at_us)
    np.testing.assert_allclose(one.worst, other.worst, rtol=1e-9)
    last, of_all = (drift_of(each, None, hosts)[1].median_s[-1] for each in (last_window(whole, None), whole_bins(whole, None)))
    np.testing.assert_allclose(last, of_all)


def test_beyond_the_limit_nothing_is_judged():
    hosts = [phases_of([(1, LimitRule(quantity=Quantity.ER_DB, alarm=20.0), 0, False, False)])]
    whole = whole_bins(minutes([60] * 200, 12.0), None)
    found = time_seconds(*drift_of(whole, None, hosts), None, 0)
    assert len(found) and not found.is_judged.any()


def test_the_strictest_host_in_force_is_run_towards():
    """20 dB is 11.42° (tan²(γ/2) = 10^(-ER/10), F-02)."""
    er = phases_of([(1, LimitRule(quantity=Quantity.ER_DB, alarm=20.0), 0, False, False),
                    (2, LimitRule(quantity=Quantity.ER_DB, alarm=20.0), 100 * S, True, False)])
    angle = phases_of([(3, LimitRule(quantity=Quantity.ANGLE_DEG, alarm=9.0), 50 * S, False, False)])
    found = levels_deg([er, angle], np.array([10, 60, 120]) * S)
    np.testing.assert_allclose(found, [11.4211863, 9.0, 9.0], atol=1e-6)
    assert np.isnan(levels_deg([er], np.array([120 * S])))
