"""A reading set aside is kept as it came, whatever it is."""

import json
import math

from hypothesis import given
from hypothesis import strategies as st

from ingest.aside import Aside, reading_json

anything = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text() | st.binary(max_size=5),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=3) | st.integers(), inner, max_size=3),
)


@given(st.dictionaries(st.text(max_size=5), anything, max_size=4))
def test_any_reading_becomes_json_without_nul(reading):
    text = reading_json(reading)
    found = json.loads(text)
    assert "\0" not in repr(found) or "\\x00" not in repr(found)
    assert len(found) <= len(reading)


def test_numbers_that_are_no_numbers_are_kept_as_text():
    found = json.loads(reading_json({"a": math.nan, "b": -math.inf, "c": 1e-300, "d": None, "e": "a\0b", "f": "\\u0000"}))
    assert found == {"a": "NaN", "b": "-Infinity", "c": 1e-300, "d": None, "e": "a\ufffdb", "f": "\\u0000"}


def test_the_same_reading_has_the_same_digest_and_another_has_not():
    def aside(**change):
        return Aside(
            **(
                {
                    "tap_id": 1,
                    "tap": "t",
                    "row": 0,
                    "field": "f",
                    "why": "w",
                    "do": "d",
                    "boot": "b",
                    "sequence": 5,
                    "reading": b"{}",
                }
                | change
            )
        )

    assert aside().digest() == aside(row=7, why="other words").digest() and len(aside().digest()) == 16
    assert (
        len({aside(**change).digest() for change in ({}, {"boot": "c"}, {"sequence": 6}, {"reading": b"1"}, {"tap": "u"})}) == 5
    )
