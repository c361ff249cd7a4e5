"""Choosing and joining reduced samples."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.rule import Quantity
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.sample import concatenate
from analysis.reduce.tap import reduce_tap
from analysis.reduce.trust import QUANTITIES
from tests.strategies import cuts, two_port_samples


@given(st.data())
def test_parts_joined_are_the_whole(data):
    whole = data.draw(two_port_samples())
    joined = concatenate([whole.take(part) for part in data.draw(cuts(len(whole)))])
    for name in ("at_us", "er_db", "power_w", "is_lower_bound", "temperature_c"):
        np.testing.assert_array_equal(getattr(joined, name), getattr(whole, name))
    for quantity in QUANTITIES:
        np.testing.assert_array_equal(joined.trust[quantity], whole.trust[quantity])
        np.testing.assert_array_equal(joined.reasons[quantity], whole.reasons[quantity])


def test_stokes_and_two_port_samples_join_with_nan_states():
    at_us = np.zeros(1, np.int64)
    stokes = reduce_tap("stokes", "W", at_us, {f"s{k}": np.array([1.0 - k / 4]) for k in range(4)}, TapCalibration())
    ports = reduce_tap("two-port", "W", at_us, {"port1": np.ones(1), "port2": np.ones(1)}, TapCalibration())
    joined = concatenate([stokes, ports])
    assert np.isfinite(joined.sop[0]).all() and np.isnan(joined.sop[1]).all()
    assert joined.take(np.array([1])).at_us.shape == (1,)
    assert ports.take(slice(0, 1)).sop is None


def test_angle_is_given_in_its_limit_s_unit():
    found = reduce_tap(
        "two-port", "W", np.zeros(1, np.int64), {"port1": np.array([1.0]), "port2": np.array([1.0])}, TapCalibration()
    )
    np.testing.assert_allclose(found.values(Quantity.ANGLE_DEG), 90.0)
    assert found.values(Quantity.ER_DB)[0] == 0.0
