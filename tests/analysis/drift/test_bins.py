"""Means over bins of time."""

import numpy as np

from analysis.drift.bins import bin_means


def test_means_of_vectors_by_bin():
    number, means = bin_means(np.array([0, 1, 5]), np.array([[1.0, 0.0], [0.0, 1.0], [2.0, 2.0]]), 2)
    assert number.tolist() == [0, 2]
    np.testing.assert_allclose(means, [[0.5, 0.5], [2.0, 2.0]])
