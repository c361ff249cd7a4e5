"""Trust from reasons; clocks."""

import numpy as np
import pytest

from analysis.reduce.trust import (
    DOUBTFUL_REASONS,
    NONE_REASONS,
    UNTRUSTED_REASONS,
    Reason,
    Trust,
    clock_marks,
    reasons_in,
    trust_of,
)

NO_STAMP = np.iinfo(np.int64).min


@pytest.mark.parametrize("reason", list(Reason))
def test_every_reason_has_words_and_at_most_one_effect(reason):
    assert reason.words[0].isupper() and reason.words[1:] and not reason.words.endswith(".")
    assert sum(bool(reason & mask) for mask in (UNTRUSTED_REASONS, DOUBTFUL_REASONS, NONE_REASONS)) == (
        0 if reason is Reason.FLOOR else 1
    )
    assert reason.code == reason.code.lower() and " " not in reason.code


def test_the_contract_s_lists():
    """Contract, section 5: what is untrusted, what is doubtful."""
    untrusted = (Reason.SATURATED, Reason.FLAT, Reason.DARK, Reason.TWO_DEVICES, Reason.IMPOSSIBLE)
    doubtful = (Reason.DOP_ABOVE_ONE, Reason.HUM, Reason.OLD_ZERO, Reason.DECLARED_BRIGHT, Reason.UNDECIDED)
    assert set(trust_of(np.array(untrusted, np.uint32))) == {Trust.UNTRUSTED}
    assert set(trust_of(np.array(doubtful, np.uint32))) == {Trust.DOUBTFUL}
    assert trust_of(np.array([0, Reason.FLOOR, Reason.HUM | Reason.FLAT], np.uint32)).tolist() == [
        Trust.TRUSTED,
        Trust.TRUSTED,
        Trust.UNTRUSTED,
    ]


def test_reasons_of_a_mask():
    assert reasons_in(int(Reason.FLOOR | Reason.OLD_ZERO)) == [Reason.FLOOR, Reason.OLD_ZERO]
    assert reasons_in(0) == []


def test_a_stamp_more_than_two_seconds_ahead_is_in_the_future():
    arrival_us = np.full(4, 10_000_000_000)
    own_us = arrival_us + np.array([2_000_000, 2_000_001, -5_000_000_000, 0])
    own_us[3] = NO_STAMP
    assert clock_marks(own_us, arrival_us).tolist() == [0, Reason.CLOCK_FUTURE, 0, 0]


def test_a_faulty_clock_is_marked_once():
    marks = clock_marks(np.array([0, 99_000_000_000]), np.array([10_000_000_000] * 2), np.array([True, True]))
    assert marks.tolist() == [Reason.CLOCK_UNSET, Reason.CLOCK_UNSET]
    assert set(trust_of(marks)) == {Trust.DOUBTFUL}  # judged: a wrong clock must not silence an alarm
