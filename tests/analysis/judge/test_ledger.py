"""Ledgers: JOB 7a's example to the second, several taps, edits, and that the classes always partition the run."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.ledger import Account, add_tap, declare_unusable, figures_of, intervals_of, note_holes, totals_of
from analysis.judge.ledger_tap import LedgerClass, LedgerReason, Ruling, TapFold, TapSeconds, fold_tap
from analysis.reduce.trust import Reason
from tests.analysis.judge.samples import ER, SECOND_US, reduced_er
from tests.strategies import two_port_samples

G, U, N, B = LedgerClass.GOOD, LedgerClass.UNTRUSTED, LedgerClass.NO_READING, LedgerClass.BELOW
HOUR, MINUTE = 3600, 60


def er_fold(samples, length_s, from_s=0):
    from_us = from_s * SECOND_US
    limit = Ruling(ER, 20.0, 0, 1 << 60)
    return fold_tap(TapFold(), samples, [limit], from_us, from_us + length_s * SECOND_US, interval_s=1.0)[1]


def tap_of(klass, why=None, doubtful=None):
    """A tap's seconds with given classes and nothing else."""
    count, nothing = len(klass), np.full(len(klass), np.nan)
    return TapSeconds(
        np.array(klass, np.uint8),
        np.zeros(count, bool) if doubtful is None else np.array(doubtful),
        np.zeros(count, np.uint32) if why is None else np.array(why, np.uint32),
        nothing, nothing, np.zeros(count, bool), 0.0, 0.0, 0,
    )


def account_of(*taps):
    account = Account.of(len(taps[0]))
    for tap in taps:
        add_tap(account, tap)
    return account


def rows_of(account):
    found = intervals_of(account)
    return [
        (int(first), int(length), LedgerClass(klass), int(why))
        for first, length, klass, why in zip(found.first_s, found.length_s, found.klass, found.why, strict=True)
    ]


def ten_hours():
    """JOB 7a, 1 Hz for 10 h: from 1:00 20 min below, from 3:00 a 30 min gap, from 5:00 10 min untrusted."""
    er_db = np.full(10 * HOUR, 30.0)
    er_db[HOUR : HOUR + 20 * MINUTE] = 19.0
    at_s = np.delete(np.arange(10 * HOUR), np.arange(3 * HOUR, 3 * HOUR + 30 * MINUTE))
    bad = np.flatnonzero((at_s >= 5 * HOUR) & (at_s < 5 * HOUR + 10 * MINUTE))
    return reduced_er(er_db[at_s], at_s=at_s, untrusted=bad)


def test_ten_hours_of_the_job_paper_to_the_second():
    """JOB 7a row 11: good 9 h 00, below 0:20, no reading 0:30, untrusted 0:10; sum 10 h."""
    account = account_of(er_fold(ten_hours(), 10 * HOUR))
    totals = totals_of(account)
    assert (totals.good_s, totals.below_s) == (9 * HOUR, 20 * MINUTE)
    assert (totals.no_reading_s, totals.untrusted_s) == (30 * MINUTE, 10 * MINUTE)
    assert totals.good_s + totals.below_s + totals.no_reading_s + totals.untrusted_s == totals.length_s == 10 * HOUR
    assert (totals.longest_good_s, totals.longest_good_from_s) == (10 * HOUR - 5 * HOUR - 10 * MINUTE, 5 * HOUR + 10 * MINUTE)
    assert totals.usable_share == pytest.approx(0.9) and totals.trusted_share == pytest.approx(33_600 / 36_000)
    assert rows_of(account) == [
        (0, HOUR, G, 0),
        (HOUR, 20 * MINUTE, B, LedgerReason.ER),
        (HOUR + 20 * MINUTE, 100 * MINUTE, G, 0),
        (3 * HOUR, 30 * MINUTE, N, 0),
        (3 * HOUR + 30 * MINUTE, 90 * MINUTE, G, 0),
        (5 * HOUR, 10 * MINUTE, U, Reason.TWO_DEVICES),
        (5 * HOUR + 10 * MINUTE, 290 * MINUTE, G, 0),
    ]


def test_its_figures_are_of_sums():
    """1200 s at 19 dB, 32400 s at 30 dB: mean leak (1200 * 10^-1.9 + 32400 * 10^-3) / 33600; 3.6 % lie at 19 dB, so 5 % at 30."""
    figures = figures_of([er_fold(ten_hours(), 10 * HOUR)])
    assert figures.mean_er_db == pytest.approx(-10 * np.log10((1200 * 10**-1.9 + 32400 * 10**-3.0) / 33600))
    assert figures.quantile_er_db == pytest.approx(30.0) and figures.least_er_db == pytest.approx(19.0)
    assert (figures.samples, figures.judged_s, figures.is_bound) == (33_600, 33_600, False)


def test_a_tap_without_judged_samples_has_no_figures():
    figures = figures_of([er_fold(reduced_er([30.0], untrusted=[0]), 1)])
    assert (figures.mean_er_db, figures.quantile_er_db, figures.least_er_db, figures.samples) == (None, None, None, 0)


@pytest.mark.parametrize(
    ("one", "other", "expected"),
    [(B, N, B), (B, U, B), (B, G, B), (N, U, N), (N, G, N), (U, G, U), (G, G, G), (U, U, U), (N, N, N), (B, B, B)],
)
def test_of_two_taps_the_worse_stands(one, other, expected):
    for pair in ((one, other), (other, one)):
        assert account_of(tap_of([pair[0]]), tap_of([pair[1]])).klass.tolist() == [expected]


def test_the_taps_and_reasons_that_decided_are_kept():
    first = tap_of([U, U, G], [Reason.FLAT, Reason.FLAT, 0])
    second = tap_of([U, G, G], [Reason.DARK, 0, Reason.OLD_ZERO], [False, False, True])
    account = account_of(first, second)
    assert account.taps.tolist() == [0b11, 0b01, 0b10]
    assert account.why.tolist() == [Reason.FLAT | Reason.DARK, Reason.FLAT, Reason.OLD_ZERO]
    assert account.is_doubtful.tolist() == [False, False, True]
    assert totals_of(account).doubtful_s == 1


def test_declaring_takes_from_good_and_gives_nothing():
    account = account_of(tap_of([G, G, B, N, U, G]))
    declare_unusable(account, [(1, 5), (-3, 0)])
    assert account.klass.tolist() == [G, U, B, N, U, G]
    assert account.why.tolist() == [0, LedgerReason.DECLARED, 0, 0, 0, 0]


def test_holes_say_why_there_is_no_reading():
    account = account_of(tap_of([G, N, N, G]))
    note_holes(account, [(0, 2, LedgerReason.NOT_KEPT)])
    assert account.klass.tolist() == [G, N, N, G] and account.why.tolist() == [0, LedgerReason.NOT_KEPT, 0, 0]


def test_a_run_without_seconds_or_taps_claims_nothing():
    assert len(intervals_of(Account.of(0))) == 0 and totals_of(Account.of(0)).longest_good_from_s is None
    assert totals_of(Account.of(7)).no_reading_s == 7


def test_a_tap_of_another_length_is_refused():
    with pytest.raises(ValueError, match="run's whole length"):
        add_tap(Account.of(3), tap_of([G]))


@given(
    st.lists(two_port_samples(max_size=30), min_size=1, max_size=3),
    st.integers(1, 120),
    st.integers(-60, 60),
    st.lists(st.tuples(st.integers(0, 100), st.integers(0, 100)), max_size=3),
)
def test_whatever_the_data_the_classes_partition_the_run(taps, length_s, shift_s, declared):
    from_s = int(taps[0].at_us[0] // SECOND_US) + shift_s
    parts = []
    for samples in taps:
        first, last = np.searchsorted(samples.at_us, [from_s * SECOND_US, (from_s + length_s) * SECOND_US])
        parts.append(er_fold(samples.take(slice(first, last)), length_s, from_s))
    account = account_of(*parts)
    before = account.klass.copy()
    assert (account.klass == np.max([part.klass for part in parts], axis=0)).all()
    declare_unusable(account, declared)
    assert not ((account.klass == G) & (before != G)).any()
    totals, intervals = totals_of(account), intervals_of(account)
    assert totals.good_s + totals.below_s + totals.untrusted_s + totals.no_reading_s == length_s == totals.length_s
    assert intervals.length_s.sum() == length_s and intervals.first_s[0] == 0
    assert (intervals.first_s[1:] == (intervals.first_s + intervals.length_s)[:-1]).all()
    for one in LedgerClass:
        assert intervals.length_s[intervals.klass == one].sum() == np.count_nonzero(account.klass == one)
    has_sample = np.zeros(length_s, bool)
    for samples in taps:
        seconds = samples.at_us // SECOND_US - from_s
        for second in seconds[(seconds >= -3) & (seconds < length_s)].tolist():
            has_sample[max(second, 0) : second + 4] = True
    assert not ((account.klass == G) & ~has_sample).any()
    assert 0 <= totals.doubtful_s <= totals.good_s and totals.longest_good_s <= totals.good_s
