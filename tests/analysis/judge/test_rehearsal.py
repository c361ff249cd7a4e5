"""A rehearsal that skips calm stretches finds exactly the episodes of the plain fold over everything."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.judge.fold import FoldState, episodes_of, fold
from analysis.judge.rehearsal import STEP_US, rehearse
from analysis.judge.rule import LimitRule, Quantity
from analysis.judge.seconds import Seconds

S = 1_000_000
MINUTE_US = 60 * S


def seconds_from(values, quantity=Quantity.ER_DB, keep=None):
    """Seconds from 0 on; NaN: not judged; ``keep``: which ones came at all."""
    at_us = np.arange(len(values), dtype=np.int64) * S
    is_judged = np.isfinite(values)
    never, ones = np.zeros(len(values), bool), np.ones(len(values), int)
    all_of_it = Seconds(quantity, 1.0, at_us, values, values, values, is_judged, never, ones)
    return all_of_it if keep is None else all_of_it.take(keep)


def rehearsed(rule, seconds, length, **more):
    cells = np.arange(-(-length // 60), dtype=np.int64) * MINUTE_US
    worst = np.full(len(cells), np.nan)
    pick = np.fmax if rule.quantity.is_bad_above else np.fmin
    pick.at(worst, seconds.at_us // MINUTE_US, seconds.worst)

    def span(from_us, until_us):
        low, high = np.searchsorted(seconds.at_us, [from_us, until_us])
        return seconds.take(slice(int(low), int(high)))

    return rehearse(rule, cells, worst.astype(np.float32).astype(float), MINUTE_US, length * S, span, interval_s=1.0, **more)


def plain(rule, seconds):
    _, events = fold(rule, FoldState(), seconds, 1.0)
    return [(one.raised_us, one.returned_us, one.alarm_us) for one in episodes_of(events)]


@settings(max_examples=60, deadline=None)
@given(
    levels=st.lists(st.tuples(st.sampled_from([30.0, 22.0, 20.0, 18.0, np.nan]), st.integers(1, 4000)), min_size=1, max_size=12),
    on_s=st.sampled_from([0.0, 5.0, 60.0, 900.0]),
    off_s=st.sampled_from([0.0, 60.0, 4000.0]),
    warning=st.sampled_from([None, 23.0]),
    gap=st.integers(0, 5000),
    seed=st.integers(0, 9),
    is_angle=st.booleans(),
)
def test_the_same_episodes_as_the_plain_fold(levels, on_s, off_s, warning, gap, seed, is_angle):
    er_db = np.concatenate([np.full(count, value) for value, count in levels])
    er_db = er_db + np.random.default_rng(seed).normal(0.0, 0.3, len(er_db))
    sign = -1.0 if is_angle else 1.0
    quantity = Quantity.ANGLE_DEG if is_angle else Quantity.ER_DB
    rule = LimitRule(
        quantity=quantity, alarm=sign * 20.0, warning=warning and sign * warning, on_delay_s=on_s, off_delay_s=off_s, deadband=1.0
    )
    keep = np.ones(len(er_db), bool)
    keep[len(er_db) // 2 : len(er_db) // 2 + gap] = False
    seconds = seconds_from(sign * er_db, quantity, keep)
    found = rehearsed(rule, seconds, len(er_db))
    assert [(one.raised_us, one.returned_us, one.alarm_us) for one in found.calls] == plain(rule, seconds)


def test_calm_days_are_not_read():
    values = np.full(86_400, 30.0)
    values[40_000:40_300] = 18.0
    found = rehearsed(LimitRule(quantity=Quantity.ER_DB, alarm=20.0), seconds_from(values), 86_400)
    assert len(found.calls) == 1 and found.read_us == STEP_US


@pytest.mark.parametrize(("hard", "lead_s"), [(19.0, 940.0), (21.5, -60.0), (10.0, None), (None, None)])
def test_lead_time_before_the_hard_level(hard, lead_s):
    """By hand: 21 dB from second 1,000 on, 18 dB from 2,000 on; on-delay 60 s, so the call comes at 1,060."""
    values = np.full(5000, 30.0)
    values[1000:2000], values[2000:3000] = 21.0, 18.0
    found = rehearsed(LimitRule(quantity=Quantity.ER_DB, alarm=22.0), seconds_from(values), 5000, hard=hard)
    assert [one.lead_s for one in found.calls] == [lead_s]


def test_nothing_stored():
    rule = LimitRule(quantity=Quantity.ER_DB, alarm=22.0)
    assert rehearse(rule, np.empty(0, np.int64), np.empty(0), MINUTE_US, 0, None, interval_s=1.0).calls == []
