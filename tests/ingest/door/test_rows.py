"""Small parts of the group commit's statements."""

import pytest

from ingest.database import BigInts, fetch, shared
from ingest.door.rows import ranges_in, touches_of

S = 1_000_000


@pytest.mark.parametrize(("text", "ranges"), [("{}", []), ("{[1,5)}", [(1, 4)]), ("{[1,2),[7,9)}", [(1, 1), (7, 8)])])
def test_multiranges_are_read(text, ranges):
    assert ranges_in(text) == ranges


def test_marks_cover_all_readings_and_little_else():
    times = [0, S, 30 * S, 500 * S, 100_000 * S, 100_001 * S]
    assert touches_of(1, times, 9) == [(1, 0, 500 * S, 9), (1, 100_000 * S, 100_001 * S, 9)]
    assert touches_of(1, [5], 9) == [(1, 5, 5, 9)]


@pytest.mark.django_db
@pytest.mark.parametrize("numbers", [[], [0], [-(2**63), 2**63 - 1, 5, -1]])
def test_whole_numbers_arrive_in_the_database_as_they_are(numbers):
    assert fetch(shared(), "SELECT %b::bigint[]", BigInts(numbers))[0][0] == numbers
