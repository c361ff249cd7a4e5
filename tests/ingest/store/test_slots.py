"""Slots of one tap never overlap, whatever rates and late readings come."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.store.slots import LENGTHS_S, slot_length_s, slots_of

S = 1_000_000


@pytest.mark.parametrize(
    ("interval_s", "length_s"),
    [(86_400, 86_400), (300, 86_400), (60, 3_600), (1, 600), (0.1, 600), (0.05, 300), (0.01, 60), (0.001, 5), (0.00001, 1)],
)
def test_the_length_follows_the_rate(interval_s, length_s):
    assert slot_length_s((np.arange(50) * interval_s * S).astype(np.int64)) == length_s


def test_lengths_divide_one_another():
    assert all(longer % shorter == 0 for longer, shorter in zip(LENGTHS_S[:-1], LENGTHS_S[1:], strict=True))


def test_a_few_readings_say_nothing_about_the_rate():
    assert slot_length_s(np.array([0, 1])) == slot_length_s(np.array([5, 5, 5, 5, 5])) == 600


batches = st.lists(
    st.tuples(st.lists(st.integers(-90_000 * S, 200_000 * S), min_size=1, max_size=8), st.sampled_from(LENGTHS_S)),
    min_size=1,
    max_size=8,
)


@given(batches)
def test_slots_are_nested_or_apart_and_hold_their_readings(batches):
    taken: dict[int, int] = {}
    for times, length_s in batches:
        at_us = np.sort(np.array(times, np.int64))
        starts, lengths = slots_of(at_us, length_s, sorted(taken.items()))
        assert ((starts <= at_us) & (at_us < starts + lengths)).all() and (starts % lengths == 0).all()
        for start, length in zip(starts.tolist(), lengths.tolist(), strict=True):
            assert taken.get(start, length) == length
            taken[start] = length
        spans = sorted(taken.items())
        assert all(start + length <= following for (start, length), (following, _) in zip(spans[:-1], spans[1:], strict=True))
