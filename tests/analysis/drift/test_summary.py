"""Merge laws of summaries."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift.summary import merged, summary_of
from tests.reference.values import reference

values = st.lists(st.one_of(st.floats(-1e6, 1e6), st.just(np.nan)), max_size=40)


def assert_same(one, other):
    """Counts, range and quantiles exactly; mean and M2 to 1e-12 of the largest value."""
    assert one.count == other.count
    np.testing.assert_array_equal([one.min, one.max], [other.min, other.max])
    scale = np.nanmax([1.0, abs(one.min), abs(one.max)])
    np.testing.assert_allclose(one.mean, other.mean, rtol=0, atol=1e-12 * scale)
    np.testing.assert_allclose(one.m2, other.m2, rtol=1e-12, atol=1e-12 * scale**2)
    np.testing.assert_array_equal(one.quantiles(np.array([0.1, 0.5, 0.9])), other.quantiles(np.array([0.1, 0.5, 0.9])))


@given(values, values, values)
def test_merge_is_associative_commutative_and_equals_the_whole(a, b, c):
    one, two, three = (summary_of(np.array(part, float)) for part in (a, b, c))
    whole = summary_of(np.array(a + b + c, float))
    for found in (merged(one, two, three), merged(merged(one, two), three), merged(one, merged(two, three)),
                  merged(three, two, one)):
        assert_same(found, whole)
    assert_same(merged(one, summary_of(np.zeros(0))), one)


@given(st.lists(st.floats(1e-9, 1e-1), min_size=2, max_size=50))
def test_agrees_with_numpy(data):
    found = summary_of(np.array(data))
    np.testing.assert_allclose([found.mean, found.min, found.max], [np.mean(data), min(data), max(data)], rtol=1e-12)
    np.testing.assert_allclose(found.sd, np.std(data, ddof=1), rtol=1e-9, atol=1e-15 * max(data))
    ranked = np.quantile(data, 0.5, method="inverted_cdf")
    assert abs(float(found.quantiles(np.array(0.5))) - ranked) <= 0.01 * ranked * (1 + 1e-9)


def test_large_offset_keeps_its_variance():
    """The classical cancellation example: sums of squares would give a negative variance."""
    row = reference("T11-shift")
    parts = [summary_of(np.array([value])) for value in row["inputs"]["x"]]
    np.testing.assert_allclose(merged(*parts).sd ** 2, row["expected"], rtol=row["tolerance"]["value"])


def test_merged_central_sums():
    row = reference("T11-moments")
    found = merged(*(summary_of(np.array(row["inputs"][part], float)) for part in "AB"))
    np.testing.assert_allclose([found.count, found.mean, found.m2], [row["expected"][key] for key in ("n", "mean", "M2")])


def test_empty_and_faults():
    none = summary_of(np.array([np.nan]))
    assert none.count == 0 and np.isnan([none.sd, none.min, none.max]).all()
    assert_same(merged(none, none), none)
    with pytest.raises(ValueError, match="at least one"):
        merged()
