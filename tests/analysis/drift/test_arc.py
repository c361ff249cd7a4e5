"""What both arc fits share: the rule for a verdict, ER of a circle."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift.arc import ArcVerdict, WorstEr, er_db_of_fraction, farthest_rad, verdict_of, worst_er_of_circle_db
from tests.reference.values import close, reference, references


@pytest.mark.parametrize("row", references("T09-rad-er"), ids=lambda row: row["id"])
def test_worst_er_of_a_circle_about_the_wanted_state(row):
    found = worst_er_of_circle_db(math.radians(row["inputs"]["radius_deg"]), 0.0)
    np.testing.assert_allclose(found, row["expected"], **close(row))


def test_launch_3_degrees_off_and_splitter_2_degrees_off():
    """methods: a circle of radius 6° whose axis lies 4° away reaches down to 21.2 dB."""
    assert worst_er_of_circle_db(math.radians(6), math.radians(4)) == pytest.approx(21.2, abs=0.05)


def test_worst_phase_of_a_circle_gives_the_least_ratio_of_a_turned_analyser():
    """T09-maxmin: light launched 3° off the axis has ellipticity 3° at its worst phase."""
    row = reference("T09-maxmin")
    radius = 2 * math.radians(row["inputs"]["theta_deg"])
    np.testing.assert_allclose(worst_er_of_circle_db(radius, 0.0), row["expected"]["min_dB"], **close(row))


@given(st.floats(0.001, 3.1), st.floats(0.0, 3.1))
def test_a_circle_has_one_worst_from_either_of_its_poles(radius, tilt):
    assert farthest_rad(radius, tilt) == pytest.approx(farthest_rad(math.pi - radius, math.pi - tilt), abs=1e-12)


@given(st.floats(1e-6, 0.999))
def test_er_of_a_fraction_is_the_ratio_of_both_ports(fraction):
    assert er_db_of_fraction(fraction) == pytest.approx(10 * math.log10((1 - fraction) / fraction), abs=1e-9)


def test_er_of_no_light_and_of_all_light():
    assert er_db_of_fraction(0.0) == math.inf and er_db_of_fraction(-1e-9) == math.inf
    assert er_db_of_fraction(1.0) == -math.inf and math.isnan(er_db_of_fraction(math.nan))


@pytest.mark.parametrize(
    ("half_arc", "low", "high", "verdict"),
    [
        (0.6, 24.0, 27.0, ArcVerdict.MEASURED),
        (0.59, 25.0, 25.1, ArcVerdict.TOO_SHORT),
        (2.0, 23.0, 26.1, ArcVerdict.TOO_SHORT),
        (2.0, -math.inf, math.inf, ArcVerdict.TOO_SHORT),
        (math.nan, 24.0, 25.0, ArcVerdict.TOO_SHORT),
    ],
)
def test_short_arcs_and_wide_bands_are_too_short(half_arc, low, high, verdict):
    assert verdict_of(half_arc, WorstEr(25.0, low, high)) is verdict
