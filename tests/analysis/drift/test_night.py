"""All statistics of a night."""

import numpy as np
import pytest

from analysis.drift.motion import Motion
from analysis.drift.night import night_statistics
from analysis.quantities import leak_from_er_db
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.tap import reduce_tap
from tests.analysis.drift.walks import noisy, walk

START_US = 1_900_000_000_000_000


def stokes_night(count=20_000, interval_s=2.0, diffusion=2e-7):
    rng = np.random.default_rng(1)
    sop = noisy(walk(count, diffusion, rng, interval_s), 0.002, rng)
    at_us = START_US + (np.arange(count) * interval_s * 1e6).astype(np.int64) + rng.integers(-1000, 1000, count)
    keep = np.ones(count, bool)
    keep[5000:5600] = False
    columns = {"s0": np.full(count, 1e-3), **{f"s{k + 1}": 0.98e-3 * sop[:, k] for k in range(3)}}
    kept = {name: column[keep] for name, column in columns.items()}
    return sop[keep], reduce_tap("stokes", "W", at_us[keep], kept, TapCalibration(wanted_state=[1.0, 0.0, 0.0]))


def two_port_night(count=20_000, interval_s=2.0):
    rng = np.random.default_rng(2)
    at_us = START_US + (np.arange(count) * interval_s * 1e6).astype(np.int64)
    er_db = 24.0 + 2.0 * np.sin(2 * np.pi * np.arange(count) * interval_s / 1800.0)
    bright = 1e-3 * (1.0 + 1e-3 * rng.standard_normal(count))
    columns = {"port1": bright, "port2": bright * leak_from_er_db(er_db)}
    return er_db, reduce_tap("two-port", "W", at_us, columns, TapCalibration())


def test_stokes_night():
    sop, reduced = stokes_night()
    night = night_statistics(reduced)
    assert night.readings == len(sop) == 19_400 and night.interval_s == pytest.approx(2.0, abs=0.01)
    mean = sop.mean(axis=0)
    np.testing.assert_allclose(night.direction.direction, mean / np.linalg.norm(mean), atol=1e-12)
    assert night.diffusion.diffusion_low <= 2e-7 <= night.diffusion.diffusion_high
    assert night.motion.motion is Motion.BROWNIAN
    np.testing.assert_allclose(night.diffusion.noise_rad, 0.002 / np.sqrt(night.step_s / 2.0), rtol=0.5)
    assert night.allan.deviation.shape[1] == 3 and len(night.allan_confidence) == 3
    assert night.displacement.noise_rad2 == pytest.approx(4 * 0.002**2, rel=0.05)
    assert night.speeds.count == len(sop) - 2
    assert night.angle.count == 19_400 and night.power.mean == pytest.approx(1e-3)


def test_two_port_night():
    er_db, reduced = two_port_night()
    night = night_statistics(reduced)
    assert night.direction is None and night.spread is None and night.displacement is None
    np.testing.assert_allclose(night.er.quantiles_db[3], np.quantile(er_db, 0.5, method="inverted_cdf"), atol=1e-9)
    np.testing.assert_allclose(night.er.leak_mean_db, -10.0 * np.log10(leak_from_er_db(er_db).mean()), atol=1e-9)
    np.testing.assert_allclose(night.er.power_mean_db, night.er.leak_mean_db, atol=0.01)
    assert night.motion.motion is Motion.CYCLIC
    np.testing.assert_allclose(night.motion.period_s, 1800.0, rtol=0.05)
    assert night.allan.deviation.ndim == 1 and len(night.allan_confidence) == 1
    np.testing.assert_allclose(night.leak.mean, leak_from_er_db(er_db).mean(), rtol=1e-9)


def test_a_fast_state_is_looked_at_in_short_steps():
    night = night_statistics(stokes_night(diffusion=1e-3)[1])
    assert night.motion.motion is Motion.UNDECIDED and "sphere" in night.motion.reason
    assert night.step_s < 60.0 and night.diffusion.steps < 2500
    assert night.diffusion.diffusion == pytest.approx(1e-3, rel=0.1)


def test_short_and_empty_nights():
    two = night_statistics(two_port_night(2)[1])
    assert two.readings == 2 and two.motion.motion is Motion.UNDECIDED
    none = night_statistics(two_port_night(2)[1].take(slice(0, 0)), interval_s=1.0)
    assert none.readings == 0 and none.er.count == 0 and np.isnan(none.er.quantiles_db).all()
    empty = night_statistics(stokes_night()[1].take(slice(0, 0)), interval_s=1.0)
    assert empty.direction.count == 0 and empty.diffusion.steps == 0
    with pytest.raises(ValueError, match="interval_s"):
        night_statistics(two_port_night(2)[1].take(slice(0, 1)))
