"""Curves of a history picture."""

import numpy as np
from hypothesis import given

from analysis.judge.rule import Quantity
from analysis.quantities import leak_from_er_db
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from analysis.rollup.cells import cells_of, holds_us, merge
from analysis.rollup.history import history_of
from tests.strategies import two_port_samples

S = 1_000_000


def history(er_db, quantity, level_s=60, **calibration):
    er_db = np.asarray(er_db, float)
    at_us = np.arange(len(er_db)) * S
    columns = {
        "port1": np.full(len(er_db), 1e-3),
        "port2": 1e-3 * leak_from_er_db(er_db),
        "temperature_c": 20.0 + np.arange(len(er_db)),
    }
    reduced = reduce_tap("two-port", "W", at_us, columns, TapCalibration(**calibration))
    return history_of(cells_of(reduced, level_s, holds_us(at_us, 1.0, next_us=len(er_db) * S)), quantity)


def test_job_example_minutes_of_20_and_40_db_average_to_22_97():
    found = history([20.0] * 60 + [40.0] * 60, Quantity.ER_DB, 120)
    np.testing.assert_allclose([found.min[0], found.mean[0], found.max[0]], [20.0, 22.97, 40.0], atol=0.005)
    np.testing.assert_allclose(found.trusted_share, [1.0])


def test_a_history_of_merged_minutes_is_that_of_the_hour():
    er_db = 25.0 + 5.0 * np.sin(np.arange(600) / 30.0)
    at_us = np.arange(600) * S
    reduced = reduce_tap(
        "two-port", "W", at_us, {"port1": np.full(600, 1e-3), "port2": 1e-3 * leak_from_er_db(er_db)}, TapCalibration()
    )
    hold = holds_us(at_us, 1.0)
    fine, coarse = cells_of(reduced, 10, hold), cells_of(reduced, 3600, hold)
    np.testing.assert_allclose(history_of(merge(fine, 3600), "er_db").mean, history_of(coarse, "er_db").mean, rtol=1e-12)
    np.testing.assert_allclose(history_of(coarse, "er_db").mean, -10 * np.log10(np.mean(10 ** (-er_db / 10))), rtol=1e-9)


def test_angle_power_and_air():
    angle = history([20.0, 30.0], Quantity.ANGLE_DEG)
    np.testing.assert_allclose([angle.min[0], angle.mean[0], angle.max[0]], [3.6225, 7.5218, 11.4212], atol=1e-4)
    np.testing.assert_allclose(history([20.0, 20.0], Quantity.POWER_W).mean, [1.01e-3])
    air = history([20.0, 20.0, 20.0], "temperature_c")
    np.testing.assert_allclose([air.min[0], air.mean[0], air.max[0]], [20.0, 21.0, 22.0])
    np.testing.assert_allclose(air.trusted_share, [3 / 60])


def test_untrusted_minutes_have_no_curve_and_no_trusted_share():
    found = history([20.0] * 60, Quantity.ER_DB, saturation1=1e-3)
    assert np.isnan([found.min[0], found.mean[0], found.max[0]]).all() and found.trusted_share[0] == 0.0


def test_summed_dark_below_zero_has_bounds_but_no_mean():
    columns = {"port1": np.full(2, 1e-3), "port2": np.array([-1e-9, -0.5e-9])}
    reduced = reduce_tap("two-port", "W", np.arange(2) * S, columns, TapCalibration(floor2=1e-9))
    found = history_of(cells_of(reduced, 10, np.full(2, S)), "er_db")
    assert np.isnan(found.mean[0]) and found.min[0] > 50.0


@given(two_port_samples(max_size=60))
def test_curves_stay_in_order(reduced):
    found = history_of(cells_of(reduced, 60, holds_us(reduced.at_us, 1.0)), "angle_deg")
    known = np.isfinite(found.mean)
    assert (found.min[known] <= found.mean[known] * (1 + 1e-12)).all() and (
        found.mean[known] <= found.max[known] * (1 + 1e-12)
    ).all()
    assert (found.trusted_share >= 0).all() and (found.trusted_share <= 1).all()
