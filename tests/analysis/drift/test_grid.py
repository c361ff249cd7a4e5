"""Readings on an even grid."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift.grid import means_on_grid, on_grid, typical_interval_s

S = 1_000_000


@given(st.integers(0, 2**32 - 1), st.integers(-(10**15), 10**15))
def test_jitter_moves_no_reading_and_a_gap_stays(seed, start_us):
    """Jitter of 20 % of the spacing about any phase."""
    rng = np.random.default_rng(seed)
    place = np.concatenate([np.arange(20), np.arange(33, 60)])
    at_us = start_us + place * S + rng.integers(-200_000, 200_001, len(place))
    grid = on_grid(at_us, place.astype(float), 1.0)
    assert len(grid.values) == 60 and np.flatnonzero(np.isnan(grid.values)).tolist() == list(range(20, 33))
    np.testing.assert_array_equal(grid.values[place], place)
    assert abs(grid.start_us - start_us) <= 200_000


def test_two_readings_of_one_place_are_averaged_and_vectors_stay_vectors():
    grid = on_grid(np.array([0, 100, S, 3 * S]), np.array([[1.0, 0], [3.0, 0], [5.0, 1], [7.0, 1]]), 1.0)
    np.testing.assert_array_equal(grid.values, [[2.0, 0], [5.0, 1], [np.nan, np.nan], [7.0, 1]])


def test_means_over_bins_of_the_epoch_leave_out_unknown_readings():
    at_us = 60 * S + np.arange(10) * S
    level = np.arange(10.0)
    level[3] = np.nan
    grid = means_on_grid(at_us, level, 4.0)
    assert grid.start_us == 60 * S and grid.averaged == 3
    np.testing.assert_allclose(grid.values, [1.0, 5.5, 8.5])


def test_nothing_and_faults():
    none = np.zeros(0, np.int64)
    assert len(on_grid(none, np.zeros(0), 1.0).values) == len(means_on_grid(none, np.zeros(0), 1.0).values) == 0
    assert np.isnan(typical_interval_s(none)) and typical_interval_s(np.array([0, S, 2 * S, 9 * S])) == 1.0
    with pytest.raises(ValueError, match="above 0"):
        on_grid(none, np.zeros(0), 0.0)
    with pytest.raises(ValueError, match="longer"):
        means_on_grid(np.array([0, 10**9 * S]), np.zeros(2), 1.0)
