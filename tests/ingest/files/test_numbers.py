import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.files.numbers import numbers_of


@pytest.mark.parametrize(("text", "decimal", "number"), [
    ("1.5", ".", 1.5), (" -2 ", ".", -2.0), ("+.5e-3", ".", 5e-4), ("7.", ".", 7.0), ("1,5", ",", 1.5), ("-0,001E2", ",", -0.1)])
def test_numbers(text, decimal, number):
    assert numbers_of([text], decimal).tolist() == [number]


@pytest.mark.parametrize(("text", "decimal"), [
    ("1,5", "."), ("1.5", ","), ("1.234,5", ","), ("", "."), ("nan", "."), ("inf", "."), ("1_0", "."), ("0x1", "."), ("1e", "."),
    ("٣", "."), ("1 2", ".")])
def test_what_is_no_number_is_nan(text, decimal):
    assert math.isnan(numbers_of([text], decimal)[0])


def test_too_large_is_infinite():
    assert numbers_of(["1e999", "-1e999"]).tolist() == [math.inf, -math.inf]


@settings(deadline=None)
@given(st.lists(st.floats(allow_nan=False, allow_infinity=False)), st.sampled_from(".,"))
def test_what_was_written_is_read_to_the_last_bit(numbers, decimal):
    texts = [repr(number).replace(".", decimal) for number in numbers]
    np.testing.assert_array_equal(numbers_of(texts, decimal), np.array(numbers, float))
