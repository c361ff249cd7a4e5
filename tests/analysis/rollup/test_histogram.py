"""The mergeable ER histogram and its quantiles."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from analysis.rollup.histogram import histogram_of, merge_histograms, quantiles

values_db = hnp.arrays(np.float64, st.integers(1, 200), elements=st.floats(-60, 90))


@given(values_db, st.lists(st.floats(0.0, 1.0), min_size=1, max_size=5))
def test_quantiles_are_within_half_a_bin_of_the_sorted_values(er_db, shares):
    """numpy's inverse of the empirical distribution is the outside measure."""
    histogram = histogram_of(er_db, np.zeros(len(er_db), np.int64), 1)
    found = quantiles(histogram, 1, np.array(shares))[0]
    np.testing.assert_allclose(found, np.quantile(er_db, shares, method="inverted_cdf"), rtol=0, atol=0.05 + 1e-9)


@given(values_db, st.integers(1, 7))
def test_merged_histograms_are_that_of_all_values(er_db, parts):
    owner = np.arange(len(er_db)) % parts
    merged = merge_histograms(histogram_of(er_db, owner, parts), np.zeros(parts, np.int64), 1)
    whole = histogram_of(er_db, np.zeros(len(er_db), np.int64), 1)
    for name in ("cell", "bin", "count"):
        np.testing.assert_array_equal(getattr(merged, name), getattr(whole, name))
    assert whole.count.sum() == len(er_db)


def test_cells_are_kept_apart_and_taken():
    histogram = histogram_of(np.array([1.0, 30.0, 30.04, 2.0]), np.array([0, 1, 1, 3]), 4)
    found = quantiles(histogram, 4, np.array([0.5]))[:, 0]
    np.testing.assert_allclose(found, [1.05, 30.05, np.nan, 2.05])
    np.testing.assert_allclose(quantiles(histogram.take(np.array([1, 3])), 2, np.array([0.5]))[:, 0], [30.05, 2.05])


def test_values_beyond_the_scale_stay_counted():
    histogram = histogram_of(np.array([-500.0, 500.0]), np.zeros(2, np.int64), 1)
    assert histogram.count.sum() == 2 and histogram.bin.tolist() == [-1000, 1000]
