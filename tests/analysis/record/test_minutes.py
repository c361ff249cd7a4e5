"""Minutes from rollups against the samples they were made of."""

import numpy as np
import pytest

from analysis.judge.rule import Quantity
from analysis.quantities import angle_between_rad, angle_rad_from_er_db
from analysis.record.calibrations import new_version
from analysis.record.minutes import air_hours, angle_minutes, sop_minutes
from analysis.record.reduce_span import find_samples
from ingest.models import TapKind
from ingest.times import SECOND_US, at_of
from labmon.pipeline.catch_up import catch_up
from tests.factories import NOON_US, make_tap, store_readings

pytestmark = pytest.mark.django_db
MINUTE_US, DAY_US = 60 * SECOND_US, 86_400 * SECOND_US
WANTED = np.array([1.0, 0.0, 0.0])


def stored(tap, seconds, now_us, **columns):
    at_us = NOON_US + SECOND_US * np.asarray(seconds)
    store_readings(tap, at_us, boot="b", sequence=np.arange(len(at_us)), **columns)
    catch_up(now_us)
    return at_us


@pytest.mark.parametrize("later_us", [DAY_US // 4, 4 * DAY_US])
def test_the_worst_second_of_each_minute_open_or_closed(later_us):
    """Two hours of noise, of an open day and of a closed one: worst and mean of the very samples."""
    tap, noise = make_tap(), np.random.default_rng(1).normal(0, 1.0, 7200)
    stored(tap, np.arange(7200), NOON_US + later_us, port1=1e-3, port2=1e-3 * 10 ** (-(25 + noise) / 10))
    found = angle_minutes(tap.pk, Quantity.ER_DB, NOON_US, NOON_US + 7200 * SECOND_US)
    samples = find_samples(tap, NOON_US, NOON_US + 7200 * SECOND_US)[0]
    by_minute = samples.angle_rad.reshape(120, 60)
    np.testing.assert_array_equal(found.at_us, NOON_US + MINUTE_US * np.arange(120))
    np.testing.assert_allclose(found.state, by_minute.max(axis=1), rtol=1e-9)
    np.testing.assert_allclose(found.start_state, by_minute.mean(axis=1), rtol=1e-9)
    np.testing.assert_allclose(found.judged_s, 60.0)
    np.testing.assert_allclose(angle_minutes(tap.pk, Quantity.ANGLE_DEG, NOON_US, NOON_US + 7200 * SECOND_US).state,
                               by_minute.max(axis=1), rtol=1e-9)


def test_the_span_is_half_open_and_gaps_are_absent():
    tap = make_tap()
    stored(tap, [*range(120), *range(300, 330)], NOON_US + DAY_US // 4, port1=1e-3, port2=1e-5)
    found = angle_minutes(tap.pk, Quantity.ER_DB, NOON_US + MINUTE_US, NOON_US + 6 * MINUTE_US)
    np.testing.assert_array_equal(found.at_us, NOON_US + MINUTE_US * np.array([1, 5]))
    np.testing.assert_allclose(found.judged_s, [62.0, 30.0])        # the last reading before the gap holds for three intervals
    assert len(angle_minutes(tap.pk, Quantity.ER_DB, NOON_US - DAY_US, NOON_US)) == 0


def test_untrusted_seconds_are_not_judged_and_doubtful_ones_are():
    """A port frozen for a minute and more is not judged; an old zero makes readings doubtful."""
    tap = make_tap()
    new_version(tap, at_of(NOON_US - DAY_US), {"saturation1": 0.9e-3})
    port1 = np.where(np.arange(240) < 120, 1e-3, 0.8e-3)
    stored(tap, np.arange(240), NOON_US + DAY_US // 4, port1=port1, port2=1e-5)
    found = angle_minutes(tap.pk, Quantity.ER_DB, NOON_US, NOON_US + DAY_US)
    np.testing.assert_allclose(found.judged_s, [0, 0, 60, 60])
    assert np.isnan(found.state[:2]).all() and not found.doubtful_s.any()
    old = make_tap()
    new_version(old, at_of(NOON_US - 40 * DAY_US), {"zero2": 1e-9})
    stored(old, np.arange(60), NOON_US + DAY_US // 4, port1=1e-3, port2=1e-5)
    found = angle_minutes(old.pk, Quantity.ER_DB, NOON_US, NOON_US + DAY_US)
    assert found.judged_s[0] == found.doubtful_s[0] == 60.0


def test_a_minute_at_the_floor_is_a_bound():
    tap = make_tap()
    new_version(tap, at_of(NOON_US - DAY_US), {"floor2": 1e-9})
    stored(tap, np.arange(60), NOON_US + DAY_US // 4, port1=1e-3, port2=0.1e-9)
    found = angle_minutes(tap.pk, Quantity.ER_DB, NOON_US, NOON_US + DAY_US)
    assert found.is_bound[0] and 0.0 < found.state[0] < angle_rad_from_er_db(50.0)


@pytest.mark.parametrize("quantity", [Quantity.ANGLE_DEG, Quantity.ER_DB])
def test_stokes_minutes_keep_direction_and_the_worst_second(quantity):
    """30 s at 2° towards +S2, 30 s at 4° towards +S3: the mean direction plus the excess is the worst second's angle."""
    tap = make_tap(kind=TapKind.STOKES)
    new_version(tap, at_of(NOON_US - DAY_US), {"wanted_state": [1.0, 0.0, 0.0]})
    one, other = np.radians(2.0), np.radians(4.0)
    first = np.arange(60) < 30
    s1, s2, s3 = np.where(first, np.cos(one), np.cos(other)), np.where(first, np.sin(one), 0), np.where(first, 0, np.sin(other))
    stored(tap, np.arange(60), NOON_US + DAY_US // 4, s0=1e-3, s1=1e-3 * s1, s2=1e-3 * s2, s3=1e-3 * s3)
    found = sop_minutes(tap.pk, quantity, NOON_US, NOON_US + DAY_US, WANTED)
    mean = np.array([s1.mean(), s2.mean(), s3.mean()])
    np.testing.assert_allclose(found.state[0], mean / np.linalg.norm(mean), atol=1e-12)
    np.testing.assert_allclose(angle_between_rad(found.state, WANTED) + found.excess_rad, [other], atol=1e-9)


def test_lost_polarization_is_part_of_the_excess_of_an_er_limit():
    """DOP 0.9 on the wanted state: the direction is right, the ER of all light is 19:1 = 12.79 dB (JOB 2a: (1 + P)/(1 - P))."""
    tap = make_tap(kind=TapKind.STOKES)
    new_version(tap, at_of(NOON_US - DAY_US), {"wanted_state": [1.0, 0.0, 0.0]})
    stored(tap, np.arange(60), NOON_US + DAY_US // 4, s0=1e-3, s1=0.9e-3, s2=0.0, s3=0.0)
    on_er = sop_minutes(tap.pk, Quantity.ER_DB, NOON_US, NOON_US + DAY_US, WANTED)
    np.testing.assert_allclose(on_er.excess_rad, angle_rad_from_er_db(10 * np.log10(19.0)), rtol=1e-9)
    on_angle = sop_minutes(tap.pk, Quantity.ANGLE_DEG, NOON_US, NOON_US + DAY_US, WANTED)
    np.testing.assert_allclose(on_angle.excess_rad, 0.0, atol=1e-6)


def test_hours_of_air():
    tap = make_tap(kind=TapKind.CLIMATE)
    stored(tap, np.arange(0, 7200, 60), NOON_US + 4 * DAY_US, temperature_c=np.repeat([20.0, 21.0], 60))
    air = air_hours(tap.pk, NOON_US, NOON_US + 7200 * SECOND_US)
    np.testing.assert_allclose(air.low_k, [293.15, 294.15])
    np.testing.assert_allclose(air.high_k, [293.15, 294.15])


def test_a_slower_past_of_a_tap_that_declares_no_interval_is_no_gap():
    """One in six seconds for two hours, then one a second: today's pace makes half of each old minute a gap, its own does not."""
    tap = make_tap(interval_s=None)
    seconds = [*range(0, 7200, 6), *range(7200, 10_800)]
    seconds = [one for one in seconds if not 3600 <= one < 3660]
    stored(tap, seconds, NOON_US + DAY_US // 4, port1=1e-3, port2=1e-5)
    found = angle_minutes(tap.pk, Quantity.ER_DB, NOON_US, NOON_US + 10_800 * SECOND_US, is_paced=False)
    assert len(found) == 179 and (NOON_US + 3600 * SECOND_US) not in found.at_us        # a minute without readings stays a gap
    np.testing.assert_allclose(found.judged_s, 60.0, atol=12.0)
    half = angle_minutes(tap.pk, Quantity.ER_DB, NOON_US + 1200 * SECOND_US, NOON_US + 2400 * SECOND_US)
    assert (half.judged_s <= 30.0).all()
