"""A spool forgets what was acknowledged and nothing else."""

from hypothesis import given
from hypothesis import strategies as st

from labmon.demo.spool import Reading, Spool, as_columns


def _reading(number):
    return Reading(sequence=number, own_at_us=number * 1_000_000, uptime_ms=number * 1000, values={"port1": 1.0 + number})


@given(st.integers(0, 40), st.lists(st.tuples(st.integers(0, 40), st.integers(0, 40))), st.sets(st.integers(0, 40)))
def test_it_keeps_exactly_what_was_not_acknowledged(count, ranges, singles):
    spool = Spool(100)
    for number in range(count):
        spool.add(_reading(number))
    acknowledged = {number for first, last in ranges for number in range(first, last + 1)} | singles
    assert spool.forget(ranges, singles) == len(acknowledged & set(range(count)))
    assert [reading.sequence for reading in spool.waiting] == [number for number in range(count) if number not in acknowledged]


def test_a_full_buffer_gives_up_its_oldest_and_counts_them():
    spool = Spool(3)
    for number in range(5):
        spool.add(_reading(number))
    assert [reading.sequence for reading in spool.oldest(9)] == [2, 3, 4]
    assert spool.lost == 2


def test_columns_are_those_of_the_contract():
    assert as_columns([_reading(4), _reading(5)]) == {"sequence": [4, 5], "at": [4_000_000, 5_000_000],
                                                      "uptime_ms": [4000, 5000], "port1": [5.0, 6.0]}
