"""A delay in data time."""

from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.timer import Timer


def held(entries, hold_us=3):
    timer = Timer()
    return [timer.step(at_us, condition, hold_us) for at_us, condition in entries]


def test_counts_from_the_first_true_entry():
    assert held([(0, False), (1, True), (2, True), (4, True)]) == [None, 0, 1, 3]


def test_a_false_entry_resets():
    assert held([(0, True), (1, False), (2, True)]) == [0, None, 0]


def test_unknown_time_is_left_out():
    assert held([(0, True), (1, None), (2, None), (3, True), (4, True)]) == [0, None, None, 1, 2]


def test_a_long_break_resets():
    assert held([(0, True), (1, True), (5, True)]) == [0, 1, 0]
    assert held([(0, True), (2, None), (4, True)]) == [0, None, 0]


@given(st.lists(st.tuples(st.integers(1, 5), st.sampled_from([True, False, None])), max_size=30))
def test_through_json_at_every_step(entries):
    kept, plain, at_us = Timer().as_json(), Timer(), 0
    for step_us, condition in entries:
        at_us += step_us
        timer = Timer.from_json(kept)
        assert timer.step(at_us, condition, 3) == plain.step(at_us, condition, 3)
        kept = timer.as_json()
        assert plain.is_running == (plain.first_us is not None)
