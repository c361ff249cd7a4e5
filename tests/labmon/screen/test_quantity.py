"""Levels of one quantity on the axis of another."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from labmon.screen.quantity import QUANTITIES, angle_of_er, converted_level, er_of_angle, quantities_of


@pytest.mark.parametrize(("er_db", "angle_deg"), [(0.0, 90.0), (20.0, 11.42), (40.0, 1.146)])
def test_angles_of_ratios(er_db, angle_deg):
    """ER 20 dB is 1 % in the wrong axis: tan²(γ/2) = 0.01, γ = 2·atan 0.1 = 11.42° (worked by hand); 0 dB is half each: 90°."""
    assert angle_of_er(er_db) == pytest.approx(angle_deg, abs=0.005)


@given(st.floats(-60, 60))
def test_there_and_back(er_db):
    assert er_of_angle(angle_of_er(er_db)) == pytest.approx(er_db, abs=1e-6)


def test_levels_move_between_er_and_angle_only():
    assert converted_level("er_db", 20.0, "angle_deg") == pytest.approx(11.42, abs=0.005)
    assert converted_level("power_w", 1e-3, "power_w") == pytest.approx(0.0, abs=1e-9)
    assert converted_level("dop", 0.9, "er_db") is None
    assert converted_level("er_db", 20.0, "dop") is None


@pytest.mark.parametrize("kind", ["two-port", "dark-port", "stokes", "climate"])
def test_every_kind_shows_quantities_that_have_a_name(kind):
    assert set(quantities_of(kind)) <= set(QUANTITIES)
