"""The course of a day: one span for all, gaps stay gaps."""

import re

from hypothesis import given
from hypothesis import strategies as st

from labmon.screen.rail import HIGH_DB, LOW_DB
from labmon.screen.sparkline import COURSE_START, HEIGHT, NO_TICK, POINTS, STEP_X, WIDTH, course_of, tick_of, y_of


def drawn(path: str) -> dict[int, int]:
    """Heights by place, read back from the path."""
    found: dict[int, int] = {}
    x = y = 0
    for command, first, second in re.findall(r"([MLl])(\d+) ?(-?\d+)", path):
        x, y = (x + int(first), y + int(second)) if command == "l" else (int(first), int(second))
        found[x] = y
    return found


@given(st.lists(st.none() | st.floats(-30, 60), max_size=POINTS))
def test_every_value_is_drawn_at_its_place_and_no_gap_is_bridged(margins):
    path = course_of(margins)
    start = COURSE_START + STEP_X * (POINTS - len(margins))
    assert drawn(path) == {start + STEP_X * index: y_of(value) for index, value in enumerate(margins) if value is not None}
    runs = len(re.findall(r"1+", "".join("0" if value is None else "1" for value in margins)))
    assert path.count("M") == runs


def test_the_limit_is_at_three_quarters_for_every_bench():
    assert y_of(0.0) == HEIGHT * 3 // 4
    assert (y_of(HIGH_DB + 9), y_of(LOW_DB - 9)) == (0, HEIGHT)


def test_only_the_newest_points_are_shown():
    assert max(drawn(course_of([1.0] * 200))) == WIDTH - STEP_X
    assert len(drawn(course_of([1.0] * 200))) == POINTS


def test_a_calm_bench_has_a_tick():
    assert tick_of(None) == NO_TICK
    assert re.fullmatch(r"M[\d.]+ 18v28", tick_of(4.0))
