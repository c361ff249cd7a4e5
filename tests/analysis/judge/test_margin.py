"""Margins in dB and in degrees on the sphere."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.margin import limit_side_by_side, margin_of, smallest_margin
from analysis.judge.rule import Quantity
from tests.strategies import er_values_db

ER, ANGLE, DOP, POWER = Quantity.ER_DB, Quantity.ANGLE_DEG, Quantity.DOP, Quantity.POWER_W


def test_job_example():
    """Job paper: limit 20 dB, now 30 dB -> 7.8 deg left (and 10 dB)."""
    margin = margin_of(ER, 30.0, 20.0)
    np.testing.assert_allclose([margin.margin_db, margin.margin_deg], [10.0, 7.8], atol=0.01)


@pytest.mark.parametrize(("high_db", "low_db", "used_deg"), [(40.0, 30.0, 2.5), (25.0, 20.0, 5.0)])
def test_decibels_hide_the_margin(high_db, low_db, used_deg):
    """Job paper, finding 1: from 40 to 30 dB uses up 2.5 deg, from 25 to 20 dB 5 deg."""
    used = margin_of(ER, high_db, 20.0).margin_deg - margin_of(ER, low_db, 20.0).margin_deg
    np.testing.assert_allclose(used, used_deg, atol=0.05)


def test_angle_limits():
    """30 dB is 3.622 deg, 20 dB 11.421 deg (T02-er-sphere): both margins are those of the ER limit."""
    margin = margin_of(ANGLE, 3.622496095, 11.42118627)
    np.testing.assert_allclose([margin.margin_db, margin.margin_deg], [10.0, 7.79869], atol=1e-4)
    assert margin_of(ANGLE, 12.0, 11.4).margin_deg < 0 and margin_of(ANGLE, 12.0, 11.4).margin_db < 0


def test_power_has_decibels_only_and_dop_neither():
    power = margin_of(POWER, [2e-3, -1e-6], 1e-3)
    np.testing.assert_allclose(power.margin_db, [3.0103, np.nan], atol=1e-4)
    assert np.isnan(power.margin_deg).all()
    dop = margin_of(DOP, 0.99, 0.9)
    assert np.isnan(dop.margin_db) and np.isnan(dop.margin_deg)


def test_a_bound_is_said_to_be_one():
    assert margin_of(ER, 57.1, 20.0, is_bound=True).is_at_least


def test_a_bench_shows_its_smallest_margin():
    wide, narrow, power, passed = (
        margin_of(ER, 30, 20),
        margin_of(ANGLE, 5, 6),
        margin_of(POWER, 2e-3, 1e-3),
        margin_of(POWER, 5e-4, 1e-3),
    )
    assert smallest_margin([wide, narrow, power]) is narrow
    assert smallest_margin([power]) is power
    assert smallest_margin([wide, passed]) is passed
    assert smallest_margin([margin_of(DOP, 1, 0.9)]) is None


def test_limits_side_by_side():
    """Job paper: 40, 30, 25, 20, 17 dB are 1.15, 3.6, 6.4, 11.4, 16.1 deg; 36 deg keep a visibility of 0.95."""
    for level_db, angle_deg in [(40, 1.15), (30, 3.6), (25, 6.4), (20, 11.4), (17, 16.1)]:
        assert limit_side_by_side(ER, level_db)[1] == pytest.approx(angle_deg, abs=0.05)
        assert limit_side_by_side(ANGLE, limit_side_by_side(ER, level_db)[1])[0] == pytest.approx(level_db)
    assert limit_side_by_side(POWER, 1e-3) == (None, None)


@given(er_values_db, er_values_db)
def test_both_margins_have_the_same_sign(value_db, alarm_db):
    margin = margin_of(ER, value_db, alarm_db)
    assert np.sign(margin.margin_db) == np.sign(margin.margin_deg) or abs(margin.margin_db) < 1e-9


@given(st.floats(0.1, 170.0), st.floats(0.1, 170.0))
def test_an_angle_limit_and_its_er_limit_leave_the_same_degrees(angle_deg, alarm_deg):
    to_db = [limit_side_by_side(ANGLE, x)[0] for x in (angle_deg, alarm_deg)]
    np.testing.assert_allclose(margin_of(ER, *to_db).margin_deg, margin_of(ANGLE, angle_deg, alarm_deg).margin_deg, atol=1e-9)
