"""Versions of a ledger compared: every second is counted once."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.ledger import Account, intervals_of
from analysis.judge.ledger_change import change_between
from analysis.judge.ledger_tap import LedgerClass

G, U, N, B = LedgerClass.GOOD, LedgerClass.UNTRUSTED, LedgerClass.NO_READING, LedgerClass.BELOW
classes = st.lists(st.sampled_from(list(LedgerClass)), max_size=30)


def intervals(klass):
    account = Account.of(len(klass))
    account.klass[:] = klass
    return intervals_of(account)


def test_a_zero_taken_later_turns_good_seconds_into_ones_below():
    change = change_between(intervals([G, G, G, N, B]), intervals([G, B, B, N, G]))
    assert change.changed_s == 3
    assert change.first_s.tolist() == [1, 4] and change.length_s.tolist() == [2, 1]
    assert change.before.tolist() == [G, B] and change.after.tolist() == [B, G]
    assert (change.counts[G, B], change.counts[B, G], change.counts[G, G], change.counts[N, N]) == (2, 1, 1, 1)


def test_versions_of_different_runs_cannot_be_compared():
    with pytest.raises(ValueError, match="one run"):
        change_between(intervals([G]), intervals([G, G]))


@given(classes, st.randoms())
def test_counts_hold_every_second_and_equal_versions_have_no_change(klass, random):
    other = list(klass)
    random.shuffle(other)
    change = change_between(intervals(klass), intervals(other))
    assert change.counts.sum() == len(klass)
    assert change.changed_s == sum(one != two for one, two in zip(klass, other, strict=True))
    assert np.trace(change.counts) == len(klass) - change.changed_s
    assert change_between(intervals(klass), intervals(klass)).changed_s == 0
