"""The quick way and the thorough way through the checks give the same body."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.door import parts
from ingest.door.body import KnownStation, KnownTap
from ingest.door.payload import check_body, lowest_sequences
from ingest.stamps import parse_stamp

STATION = KnownStation(
    1,
    "s",
    {
        name: KnownTap(number, name, "two-port", unit)
        for number, (name, unit) in enumerate([("a", "W"), ("b", "count"), ("c", "dBm")])
    },
)
numbers = st.floats(-1e3, 1e3) | st.integers(-1000, 1000)


@st.composite
def good_bodies(draw):
    """Bodies of the usual form."""
    taps = {}
    for name in draw(st.lists(st.sampled_from("abc"), min_size=1, max_size=3, unique=True)):
        count = draw(st.integers(1, 6))
        first = draw(st.integers(0, 10**6))
        column = st.lists(numbers, min_size=count, max_size=count)
        taps[name] = {
            "sequence": list(range(first, first + count)),
            "port1": draw(column),
            "port2": draw(column),
            "at": [f"2031-03-04T02:11:{second:02d}.5Z" for second in range(count)],
        }
        if draw(st.booleans()):
            taps[name]["clipped"] = draw(st.lists(st.booleans(), min_size=count, max_size=count))
    return {"boot": "x", "taps": taps}


@given(good_bodies())
def test_both_ways_give_the_same(found):
    quick = check_body(found, STATION, 5)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(parts, "_give_plain_values", lambda drafts: False)
        patch.setattr(parts, "parse_stamps", lambda texts: np.array([parse_stamp(text) for text in texts], np.int64))
        thorough = check_body(found, STATION, 5)
    assert (quick.sending, quick.count, quick.is_stamped) == (thorough.sending, thorough.count, thorough.is_stamped)
    for one, other in zip(quick.parts, thorough.parts, strict=True):
        assert one.values.tobytes() == other.values.tobytes() and one.names == other.names and not one.aside
        assert one.own_at_us.tolist() == other.own_at_us.tolist() and one.sequence.tolist() == other.sequence.tolist()


@pytest.mark.parametrize(
    ("found", "lowest"),
    [
        ({"boot": "x", "taps": {"a": {"sequence": [5, 3, None, "2", True, -1]}, "b": {}, "nobody": {"sequence": [1]}}}, {0: 3}),
        ({"boot": "", "taps": {"a": {"sequence": [5]}}}, {}),
        ({"boot": 7, "taps": {"a": {"sequence": [5]}}}, {}),
        ({"boot": "x", "taps": [1]}, {}),
        ({"boot": "x", "taps": {"a": {"sequence": 5}, "b": 7}}, {}),
        ({}, {}),
    ],
)
def test_numbers_of_a_refused_body_are_read_as_far_as_they_can(found, lowest):
    assert lowest_sequences(found, STATION)[1] == lowest
