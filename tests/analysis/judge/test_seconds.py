"""Samples to seconds; what a bound says against a level."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.rule import Quantity
from analysis.judge.seconds import Status, concatenate, is_undecided, plain_samples_of, seconds_of, statuses
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from analysis.reduce.trust import is_usable
from tests.analysis.judge.samples import ANGLE, ER, er_rule, reduced_er
from tests.strategies import two_port_samples


def test_ten_hertz_becomes_worst_and_er_of_sums():
    """Contract: faster taps are reduced to worst, sum and mean per second; the mean is the ER of sums (22.97 dB)."""
    seconds = seconds_of(reduced_er([20.0, 40.0, 30.0], at_s=[0.1, 0.9, 1.0]), ER)
    assert seconds.at_us.tolist() == [100_000, 1_000_000] and seconds.count.tolist() == [2, 1]
    np.testing.assert_allclose(seconds.worst, [20.0, 30.0])
    np.testing.assert_allclose(seconds.best_sure, [40.0, 30.0])
    np.testing.assert_allclose(seconds.mean, [22.97, 30.0], atol=0.005)


def test_worst_angle_is_the_largest():
    seconds = seconds_of(reduced_er([20.0, 40.0], at_s=[0.1, 0.9]), ANGLE)
    np.testing.assert_allclose(seconds.worst, [11.42], atol=0.005)
    assert statuses(seconds, 11.0).tolist() == [Status.BELOW] and statuses(seconds, 12.0).tolist() == [Status.INSIDE]


def test_an_untrusted_sample_does_not_count_beside_a_judged_one():
    seconds = seconds_of(reduced_er([10.0, 30.0, 10.0], at_s=[0.1, 0.2, 1.1], untrusted=[0, 2]), ER)
    assert statuses(seconds, 20.0).tolist() == [Status.INSIDE, Status.UNTRUSTED]
    assert np.isnan(seconds.worst[1]) and not seconds.is_judged[1]


def test_below_is_strictly_below():
    seconds = plain_samples_of(reduced_er([20.0]), ER)
    level = float(seconds.worst[0])
    assert statuses(seconds, level)[0] == Status.INSIDE and statuses(seconds, np.nextafter(level, np.inf))[0] == Status.BELOW


def test_a_bound_that_meets_the_limit_is_inside_one_that_does_not_is_undecided():
    """1 mW over a 1 nW floor: at least 57.1 dB. Against 50 dB that is inside, against 60 dB nobody can tell."""
    reduced = reduce_tap(
        "two-port", "W", np.zeros(1, np.int64), {"port1": np.array([1e-3]), "port2": np.zeros(1)}, TapCalibration(floor2=1e-9)
    )
    seconds = plain_samples_of(reduced, ER)
    assert statuses(seconds, 50.0)[0] == Status.INSIDE and statuses(seconds, 60.0)[0] == Status.UNDECIDED
    assert not is_undecided(reduced, er_rule(alarm=50.0))[0] and is_undecided(reduced, er_rule(alarm=60.0))[0]
    angle = plain_samples_of(reduced, ANGLE)
    assert statuses(angle, 1.0)[0] == Status.INSIDE and statuses(angle, 0.1)[0] == Status.UNDECIDED
    np.testing.assert_allclose(seconds.shown(), 57.08, atol=0.01)


def test_an_upper_bound_below_the_limit_is_below():
    """The wanted port at floor under a bright other port: ER at most -57 dB, so it is certainly lost."""
    reduced = reduce_tap(
        "two-port", "W", np.zeros(1, np.int64), {"port1": np.zeros(1), "port2": np.array([1e-3])}, TapCalibration(floor1=1e-9)
    )
    assert statuses(plain_samples_of(reduced, ER), 20.0)[0] == Status.BELOW
    assert statuses(plain_samples_of(reduced, ANGLE), 30.0)[0] == Status.BELOW
    assert statuses(plain_samples_of(reduced, ER), -60.0)[0] == Status.UNDECIDED


def test_no_samples_give_no_seconds():
    empty = reduced_er([30.0]).take(slice(0, 0))
    assert len(seconds_of(empty, ER)) == 0 and len(statuses(seconds_of(empty, ER), 1.0)) == 0


@given(two_port_samples(interval_us=200_000), st.sampled_from([Quantity.ER_DB, Quantity.POWER_W, Quantity.ANGLE_DEG]))
def test_seconds_hold_what_their_samples_hold(reduced, quantity):
    seconds = seconds_of(reduced, quantity)
    number = reduced.at_us // 1_000_000
    value, usable = reduced.values(quantity), is_usable(reduced.trust[quantity], reduced.values(quantity))
    assert seconds.count.sum() == len(reduced)
    sign = -1 if quantity.is_bad_above else 1
    level = {"er_db": 20.0, "power_w": 1.5e-3, "angle_deg": 11.0}[quantity.value]
    lower, upper = (
        reduced.is_lower_bound & (quantity is not Quantity.POWER_W),
        reduced.is_upper_bound & (quantity is not Quantity.POWER_W),
    )
    for k, status in enumerate(statuses(seconds, level)):
        inside = (number == number[np.flatnonzero(reduced.at_us == seconds.at_us[k])[0]]) & usable
        beyond = np.any(inside & ~lower & (sign * value < sign * level))
        within = np.any(inside & ~upper & (sign * value >= sign * level))
        expected = (
            Status.UNTRUSTED if not inside.any() else Status.BELOW if beyond else Status.INSIDE if within else Status.UNDECIDED
        )
        assert status == expected


@given(two_port_samples(interval_us=300_000))
def test_cutting_at_whole_seconds_changes_nothing(reduced):
    number = reduced.at_us // 1_000_000
    middle = int(np.searchsorted(number, number[len(number) // 2]))
    joined = concatenate([seconds_of(reduced.take(slice(0, middle)), ER), seconds_of(reduced.take(slice(middle, None)), ER)])
    whole = seconds_of(reduced, ER)
    for name in ("at_us", "worst", "best_sure", "mean", "is_judged", "is_doubtful", "count"):
        np.testing.assert_array_equal(getattr(joined, name), getattr(whole, name))
