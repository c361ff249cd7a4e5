"""Sums over neighbouring rows."""

import numpy as np

from analysis.rollup.groups import Groups, one_group


def test_sums_minima_and_maxima_of_each_group():
    groups = Groups(np.array([0, 2]), 5)
    amount = np.array([1.0, 2.0, np.nan, 5.0, 3.0])
    assert groups.sizes.tolist() == [2, 3] and groups.of_sample().tolist() == [0, 0, 1, 1, 1]
    assert groups.minima(amount).tolist() == [1.0, 3.0] and groups.maxima(amount).tolist() == [2.0, 5.0]
    assert groups.sums(np.array([True, False, True, True, True])).tolist() == [1, 3]


def test_no_row_is_no_group():
    groups = one_group(0)
    assert len(groups.sizes) == 0 and groups.sums(np.zeros((0, 3))).shape == (0, 3)
    assert groups.minima(np.zeros(0)).shape == groups.maxima(np.zeros(0)).shape == (0,)
    assert one_group(4).sizes.tolist() == [4]
