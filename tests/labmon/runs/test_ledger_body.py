"""What is kept of a ledger reads back, by labmon and by NumPy alone."""

import io

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.ledger import Account, intervals_of
from analysis.judge.ledger_tap import LedgerClass
from labmon.runs.ledger_body import packed, unpacked

seconds_kept = st.tuples(st.sampled_from(list(LedgerClass)), st.booleans(), st.integers(0, 2**32 - 1), st.integers(0, 2**64 - 1))


@given(st.lists(seconds_kept))
def test_any_intervals_come_back(seconds):
    account = Account.of(len(seconds))
    for place, (klass, is_doubtful, why, taps) in enumerate(seconds):
        account.klass[place], account.is_doubtful[place], account.why[place], account.taps[place] = klass, is_doubtful, why, taps
    intervals = intervals_of(account)
    body = packed(intervals)
    back = unpacked(body)
    for name in ("first_s", "length_s", "klass", "is_doubtful", "why", "taps"):
        np.testing.assert_array_equal(getattr(back, name), getattr(intervals, name))
    assert sorted(np.load(io.BytesIO(body)).files) == ["first_s", "is_doubtful", "klass", "length_s", "taps", "why"]
