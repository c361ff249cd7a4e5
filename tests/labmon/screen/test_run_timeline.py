"""The drawn run: each class has its own stroke or hatch, short stretches are not lost, nothing unknown is drawn."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.ledger import Account, intervals_of
from analysis.judge.ledger_tap import LedgerClass
from labmon.screen.run_timeline import STEPS, Profile, classes_of_steps, timeline

G, U, N, B = LedgerClass.GOOD, LedgerClass.UNTRUSTED, LedgerClass.NO_READING, LedgerClass.BELOW


def intervals(klass):
    account = Account.of(len(klass))
    account.klass[:] = klass
    return intervals_of(account)


def test_one_bad_second_of_a_night_is_drawn():
    klass = np.full(43_200, G)
    klass[30_000] = B
    drawn = classes_of_steps(intervals(klass), 43_200)
    assert [one[2] for one in drawn] == [G, B, G] and drawn[1][1] - drawn[1][0] == 1


def test_each_class_has_its_own_form_and_the_words_are_there():
    profile = Profile("n2/in", np.array([1.0, np.nan, -2.0]))
    text = timeline(profile, intervals([G] * 5 + [B] * 5 + [U] * 5 + [N] * 5), 20, "in <words>")
    forms = ("run-base", "run-below", "run-untrusted", "url(#hatch)", "run-gap", "run-course", 'aria-label="in &lt;words&gt;"')
    for form in forms:
        assert form in text
    assert text.count("M") and "nan" not in text


def test_what_is_not_yet_accounted_for_is_not_drawn():
    drawn = classes_of_steps(intervals([G] * 50), 100)
    assert drawn == [(0, STEPS // 2, G)]


@given(st.lists(st.sampled_from(list(LedgerClass)), min_size=1, max_size=80), st.integers(0, 50))
def test_stretches_touch_and_reach_as_far_as_the_account(klass, left_s):
    drawn = classes_of_steps(intervals(klass), len(klass) + left_s)
    assert drawn[0][0] == 0 and all(one[1] == two[0] for one, two in zip(drawn, drawn[1:], strict=False))
    assert max(one[2] for one in drawn) == max(klass)
