"""Quantiles to a relative error, merging exactly."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.rollup.sketch import Sketch, merge_sketches, representative, sketch_of, sketch_quantiles
from tests.reference.lcg import lcg_values
from tests.reference.values import close, reference, references

values = st.lists(st.one_of(st.floats(1e-12, 1e6), st.floats(-1.0, 0.0), st.just(np.nan)), max_size=40)


def same(one: Sketch, other: Sketch) -> bool:
    return (one.bucket.tolist(), one.count.tolist(), one.not_positive) == (
        other.bucket.tolist(), other.count.tolist(), other.not_positive)


@pytest.mark.parametrize("row", [row for row in references("T11-dd-") if "x" in row["inputs"]], ids=lambda row: row["id"])
def test_bucket_and_its_value(row):
    """C. Masson, J. E. Rim, H. K. Lee, PVLDB 12, 2195 (2019); formulas from memory, computed with mpmath."""
    sketch = sketch_of(np.array([row["inputs"]["x"]]), row["inputs"]["alpha"])
    assert sketch.bucket.tolist() == [row["expected"]["index"]]
    np.testing.assert_allclose(representative(sketch.bucket, 0.01), [row["expected"]["estimate"]], **close(row))


def test_merged_sketch_keeps_the_error_against_sorted_values():
    row = reference("T11-dd-merge")
    data = np.exp(3.0 * (lcg_values(20001)[1:] - 0.5))
    sketch = merge_sketches(sketch_of(data[:9000]), sketch_of(data[9000:]))
    assert same(sketch, sketch_of(data))
    np.testing.assert_allclose(sketch_quantiles(sketch, np.array([0.01, 0.5, 0.99])), row["expected"], **close(row))


@given(values, values, values)
def test_merge_is_exact_commutative_and_associative(a, b, c):
    one, two, three = (sketch_of(np.array(part, float)) for part in (a, b, c))
    assert same(merge_sketches(one, two), merge_sketches(two, one))
    left, right = merge_sketches(merge_sketches(one, two), three), merge_sketches(one, merge_sketches(two, three))
    assert same(left, right) and same(left, sketch_of(np.array(a + b + c, float)))
    assert same(merge_sketches(one, sketch_of(np.zeros(0))), one)


@given(st.lists(st.floats(1e-12, 1e6), min_size=1, max_size=60), st.floats(0.0, 1.0))
def test_quantile_is_within_the_error_of_the_ranked_value(data, share):
    """numpy's inverted_cdf quantile of the sorted values."""
    found = float(sketch_quantiles(sketch_of(np.array(data)), np.array(share)))
    ranked = float(np.sort(data)[max(int(np.ceil(share * len(data))), 1) - 1])
    assert abs(found - ranked) <= 0.01 * ranked * (1 + 1e-9)


def test_values_not_above_zero_rank_lowest_and_have_no_quantile():
    sketch = sketch_of(np.array([-1.0, 0.0, 5.0, np.inf]))
    assert sketch.total == 3
    found = sketch_quantiles(sketch, np.array([0.5, 1.0]))
    assert np.isnan(found[0]) and abs(found[1] - 5.0) <= 0.05
    assert np.isnan(sketch_quantiles(sketch_of(np.zeros(0)), np.array([0.5]))).all()


def test_faults_are_named():
    with pytest.raises(ValueError, match="relative_error"):
        sketch_of(np.ones(1), 1.0)
    with pytest.raises(ValueError, match="differ"):
        merge_sketches(sketch_of(np.ones(1), 0.01), sketch_of(np.ones(1), 0.02))
    with pytest.raises(ValueError, match="shares"):
        sketch_quantiles(sketch_of(np.ones(1)), np.array([1.5]))
