"""Arrays for the browser: whole numbers, null for gaps, an even grid."""

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from labmon.screen.scaled import dbm_of, gaps_of, on_grid, whole_numbers


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


def test_missing_buckets_are_holes_in_the_grid():
    first_us, (grid,) = on_grid(np.array([1000, 2000, 5000]), [np.array([1.0, 2.0, 5.0])], 1000)
    assert first_us == 1000
    np.testing.assert_array_equal(grid, [1, 2, np.nan, np.nan, 5])


@pytest.mark.parametrize(
    ("known", "gaps"), [([1, 1, 1], []), ([1, 0, 0, 1], [(110.0, 130.0)]), ([0, 1, 0], [(100.0, 110.0), (120.0, 130.0)])]
)
def test_gaps_are_found_where_nothing_is_known(known, gaps):
    assert gaps_of(np.array(known, dtype=bool), 100.0, 10.0) == gaps
