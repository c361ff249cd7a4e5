"""Spans cut into pieces of bounded size."""

from hypothesis import given
from hypothesis import strategies as st

from labmon.api import chunks
from labmon.api.chunks import cut_us


def test_a_piece_ends_before_the_row_that_would_make_it_too_large():
    rows = [(0, 15_000), (10, 9_000), (20, 5_000), (30, 1)]
    assert cut_us([rows, []], 0, 100) == 20


def test_small_rows_stay_in_one_piece():
    assert cut_us([[(0, 10), (10, 10)], [(5, 3)]], 0, 100) == 100


def test_one_row_larger_than_a_piece_is_a_piece():
    assert cut_us([[(0, 900_000), (10, 5)], []], 0, 100) == 10


def test_beyond_a_full_list_nothing_is_known():
    rows = [(number, 1) for number in range(chunks.ROWS_LOOKED_AT)]
    assert cut_us([rows, []], 0, 10_000) == chunks.ROWS_LOOKED_AT - 1


stored_rows = st.lists(st.tuples(st.integers(-50, 1000), st.integers(1, 60_000)), max_size=40).map(sorted)


@given(stored_rows, stored_rows, st.integers(0, 500))
def test_a_piece_moves_on_and_holds_no_more_than_allowed(blocks, inbox, from_us):
    until_us = 1001
    cut = cut_us([blocks, inbox], from_us, until_us)
    assert from_us < cut <= until_us
    inside = [count for first_us, count in blocks + inbox if first_us < cut]
    begun_before = [count for first_us, count in blocks + inbox if first_us <= from_us]
    first = min((row for row in blocks + inbox if row[0] < cut), default=(0, 0))
    assert sum(inside) <= max(chunks.READINGS_A_CHUNK, sum(begun_before), first[1])
