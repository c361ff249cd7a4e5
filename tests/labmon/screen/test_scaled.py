"""Arrays for the browser: whole numbers, null for gaps, values held a while."""

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from labmon.screen.scaled import dbm_of, gaps_of, held, whole_numbers


@given(arrays(np.float64, st.integers(0, 50), elements=st.floats(allow_nan=True, allow_infinity=True, width=64)))
def test_whatever_comes_the_answer_is_json_with_nulls(values):
    numbers = whole_numbers(values, 100)
    assert json.loads(json.dumps(numbers, allow_nan=False)) == numbers
    assert all((number is None) or np.isfinite(value) for number, value in zip(numbers, values, strict=True))


@given(arrays(np.float64, 20, elements=st.floats(-1e6, 1e6)))
def test_rounding_errs_by_half_a_step(values):
    np.testing.assert_allclose(np.array(whole_numbers(values, 100)) / 100, values, atol=0.005 + 1e-9)


def test_dbm_by_its_definition():
    """1 mW is 0 dBm, 1 W is 30 dBm (IEC 60027-3); no power has none."""
    np.testing.assert_allclose(dbm_of(np.array([1e-3, 1.0])), [0.0, 30.0], atol=1e-12)
    assert np.isnan(dbm_of(np.array([0.0, -1e-6]))).all()


def test_a_value_holds_a_while_and_no_longer():
    values = np.array([np.nan, 1.0, np.nan, np.nan, np.nan, 2.0, np.nan])
    np.testing.assert_array_equal(held(values, 2), [np.nan, 1, 1, 1, np.nan, 2, 2])
    np.testing.assert_array_equal(held(values, 0), values)
    assert np.isnan(held(np.full(3, np.nan), 5)).all()


@pytest.mark.parametrize(
    ("known", "gaps"), [([1, 1, 1], []), ([1, 0, 0, 1], [(110.0, 130.0)]), ([0, 1, 0], [(100.0, 110.0), (120.0, 130.0)])]
)
def test_gaps_are_found_where_nothing_is_known(known, gaps):
    assert gaps_of(np.array(known, dtype=bool), 100.0, 10.0) == gaps
