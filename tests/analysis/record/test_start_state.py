"""The state a run would start from."""

import math

import numpy as np
import pytest

from analysis.judge.rule import Quantity
from analysis.quantities import angle_rad_from_er_db
from analysis.record.calibrations import new_version
from analysis.record.start_state import start_state
from ingest.models import TapKind
from ingest.times import SECOND_US, at_of
from tests.factories import NOON_US, make_tap, store_readings

pytestmark = pytest.mark.django_db
DAY_US = 86_400 * SECOND_US
LIMIT_RAD = float(angle_rad_from_er_db(20.0))


def state_of(tap, seconds, *, quantity=Quantity.ER_DB, is_on_sphere=False, **columns):
    at_us = NOON_US + SECOND_US * np.asarray(seconds)
    store_readings(tap, at_us, boot="b", sequence=np.arange(len(at_us)), **columns)
    return start_state(tap, quantity, int(at_us[-1]), LIMIT_RAD, interval_s=1.0, is_on_sphere=is_on_sphere)


def test_the_mean_angle_of_the_last_minute():
    er_db = np.repeat([20.0, 30.0, 40.0], [60, 30, 30])
    found = state_of(make_tap(), np.arange(120), port1=1e-3, port2=1e-3 * 10 ** (-er_db / 10))
    assert found.is_trusted and found.state == pytest.approx(angle_rad_from_er_db(np.array([30.0, 40.0])).mean())
    assert found.at_us == NOON_US + 119 * SECOND_US and not found.is_bound


def test_most_of_the_minute_must_be_trusted_and_why_is_said():
    tap = make_tap()
    new_version(tap, at_of(NOON_US - DAY_US), {"saturation1": 0.9e-3})
    found = state_of(tap, np.arange(60), port1=np.where(np.arange(60) < 31, 1e-3, 0.5e-3), port2=1e-6)
    assert not found.is_trusted and "port saturated" in found.why_not and math.isfinite(found.state)


def test_a_doubtful_reading_is_no_trusted_start():
    tap = make_tap()
    new_version(tap, at_of(NOON_US - 40 * DAY_US), {"zero2": 1e-9})
    found = state_of(tap, np.arange(60), port1=1e-3, port2=1e-6)
    assert not found.is_trusted and found.why_not == ("zero is old",) and math.isfinite(found.state)


@pytest.mark.parametrize(("floor_w", "is_at_floor"), [(1e-9, False), (1e-4, True)])
def test_a_bound_within_the_limit_is_a_start_and_one_beyond_is_not(floor_w, is_at_floor):
    tap = make_tap()
    new_version(tap, at_of(NOON_US - DAY_US), {"floor2": floor_w})
    found = state_of(tap, np.arange(60), port1=1e-3, port2=floor_w / 10)
    assert found.is_bound and found.is_at_floor is is_at_floor


def test_nothing_judged_and_nothing_read():
    tap = make_tap()
    new_version(tap, at_of(NOON_US - DAY_US), {"saturation1": 0.9e-3})
    found = state_of(tap, np.arange(60), port1=1e-3, port2=1e-6)
    assert not found.is_trusted and math.isnan(found.state)
    silent = start_state(make_tap(), Quantity.ER_DB, NOON_US, LIMIT_RAD, interval_s=1.0, is_on_sphere=False)
    assert not silent.is_trusted and silent.at_us is None and silent.why_not == ("no reading in the last minute",)


def test_slow_taps_look_at_three_intervals():
    tap = make_tap(interval_s=300.0)
    at_us = NOON_US + 300 * SECOND_US * np.arange(4)
    store_readings(tap, at_us, port1=1e-3, port2=1e-6, boot="b", sequence=np.arange(4))
    found = start_state(tap, Quantity.ER_DB, int(at_us[-1]) + 200 * SECOND_US, LIMIT_RAD, interval_s=300.0, is_on_sphere=False)
    assert found.is_trusted


def test_the_mean_direction_of_a_polarimeter():
    tap = make_tap(kind=TapKind.STOKES)
    new_version(tap, at_of(NOON_US - DAY_US), {"wanted_state": [1.0, 0.0, 0.0]})
    s2 = np.where(np.arange(60) < 30, 0.1, -0.1)
    found = state_of(tap, np.arange(60), quantity=Quantity.ANGLE_DEG, is_on_sphere=True, s0=1e-3, s1=1e-3 * np.sqrt(1 - s2**2),
                     s2=1e-3 * s2, s3=0.0)
    np.testing.assert_allclose(found.state, [1.0, 0.0, 0.0], atol=1e-9)
