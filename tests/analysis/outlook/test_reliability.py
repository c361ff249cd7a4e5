"""Reliability tables counted by hand and against scipy's exact intervals."""

import numpy as np
import pytest
from scipy.stats import binomtest

from analysis.outlook.reliability import reliability_by_value, reliability_table
from tests.reference.values import close, reference


def test_rows_by_value():
    row = reference("T08-reliab")
    got = reliability_by_value(row["inputs"]["forecast"], row["inputs"]["outcome"])
    np.testing.assert_allclose([[one.said, one.came_out, one.count] for one in got], row["expected"], **close(row))


def test_counts_stand_beside_their_interval():
    """scipy.stats.binomtest, exact: 9 of 12."""
    (row,) = reliability_table(np.full(12, 0.85), np.array([1] * 9 + [0] * 3))
    expected = binomtest(9, 12).proportion_ci(0.95, "exact")
    assert (row.count, row.came_true, row.came_out) == (12, 9, 0.75)
    np.testing.assert_allclose([row.low, row.high], [expected.low, expected.high], rtol=1e-9)
    assert row.is_as_said


def test_bins_take_their_lower_edge():
    rows = reliability_table([0.8, 0.89, 0.9, 0.96, 0.97, 1.0], [1, 0, 1, 1, 1, 1])
    assert [(row.count, row.came_true) for row in rows] == [(2, 1), (2, 2), (2, 2)]
    np.testing.assert_allclose([row.said for row in rows], [0.845, 0.93, 0.985])


def test_band_of_chance_by_hand():
    """Chance ½, 4 cases: 0 and 4 have 1/16 each, more than 2.5 %, so that the central band is all of [0, 1]."""
    (row,) = reliability_table([0.5] * 4, [1, 1, 1, 1])
    assert (row.band_low, row.band_high) == (0.0, 1.0)
    (row,) = reliability_table([0.5] * 6, [1] * 6)
    assert row.band_high == pytest.approx(5 / 6) and not row.is_as_said


def test_no_case_gives_no_row():
    assert reliability_table([], []) == () and reliability_by_value([], []) == ()


def test_certain_forecasts_have_no_band():
    (row,) = reliability_table([1.0, 1.0], [1, 1])
    assert (row.band_low, row.band_high) == (1.0, 1.0) and row.is_as_said
