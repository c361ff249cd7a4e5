"""PM cords swing with temperature; the walk of N3 ends as the ledger says."""

import numpy as np
import pytest

from analysis.fibre.sphere import angle_between_rad
from labmon.demo.benches import bench_named
from labmon.demo.ledger import LEDGER
from labmon.demo.moments import moment
from labmon.demo.paths import sop_of_displacement
from labmon.demo.world import World


@pytest.fixture(scope="module")
def world():
    return World(15)


def test_pm_leak_swings_between_difference_and_sum(world):
    """JOB 2a: between sin²(α-β) and sin²(α+β); 1.5° + 1.5° → worst 25.6 dB. N2's arc of ±2.5 rad shows both ends."""
    bench = bench_named("N2")
    leak = world.leak(bench, np.arange(moment(2, 0), moment(3, 0), 5.0)) - bench.path.floor_leak
    assert leak.max() == pytest.approx(np.sin(np.radians(3.0)) ** 2, rel=0.01)
    assert leak.min() == pytest.approx(0.0, abs=2e-6)


def test_n2_swings_by_two_and_a_half_radians_each_cycle(world):
    """JOB 8: arc ±2.5 rad; 3 m at 2.4 rad/(K m) and ±0.35 K give ±2.5 rad."""
    bench = bench_named("N2")
    at_s = np.arange(moment(2, 0), moment(3, 0), 10.0)
    air = world.air["North Hall"]
    kelvin = np.interp(at_s, air.grid_s, air.inside(bench.path.lag_s))
    cycles = kelvin.reshape(-1, 144)
    half_swing_k = np.median(cycles.max(axis=1) - cycles.min(axis=1)) / 2
    assert half_swing_k * 3.0 * 2.4 == pytest.approx(2.5, rel=0.12)


@pytest.mark.parametrize("day", range(1, 15))
def test_n3_fails_in_three_nights_and_in_no_other(world, day):
    bench = bench_named("N3")
    night = np.arange(moment(day, 20), moment(day + 1, 8), 20.0)
    night = night[night < moment(15, 0)]
    leak = world.leak(bench, night)
    er_db = -10 * np.log10(leak / (1 - leak))
    if day not in (4, 8, 11):
        assert er_db.min() > 20.0
        return
    warned, crossed = night[np.argmax(er_db < 20.0)], night[np.argmax(er_db < 17.0)]
    assert (er_db < 17.0).sum() * 20.0 > 2 * 3600
    assert crossed - warned >= 20 * 60


def test_n3_walks_as_fast_as_the_job_says(world):
    """JOB 8: about 2.3° per √h. Steps of 10 min; the air's own motion is left out by taking the walk alone."""
    from labmon.demo.paths import _nightly_walk

    at_s = np.arange(moment(1, 10), moment(15, 9), 600.0)
    walk = _nightly_walk("N3", at_s, np.radians(2.3), LEDGER, world.seed)
    steps = np.degrees(np.hypot(*np.diff(walk, axis=0).T))
    same_day = np.floor((at_s[1:] - 9.5 * 3600) / 86400) == np.floor((at_s[:-1] - 9.5 * 3600) / 86400)
    assert np.sqrt(np.mean(steps[same_day] ** 2)) * np.sqrt(6.0) == pytest.approx(2.3, rel=0.06)


def test_displacement_is_the_great_circle_angle():
    rng = np.random.default_rng(2)
    wanted = np.array([0.6, 0.48, 0.64])
    moved = rng.uniform(-1.5, 1.5, (50, 2))
    sop = sop_of_displacement(moved, wanted)
    np.testing.assert_allclose(np.linalg.norm(sop, axis=1), 1.0, atol=1e-12)
    np.testing.assert_allclose(angle_between_rad(sop, wanted), np.hypot(*moved.T), atol=1e-12)
    np.testing.assert_allclose(sop_of_displacement(np.zeros((1, 2)), wanted), wanted[None], atol=1e-12)
