"""Speeds on the sphere."""

import numpy as np
import pytest

from analysis.drift.speed import speeds, speeds_of_steps
from tests.analysis.drift.walks import about_start, noisy, walk


def test_steady_turn_has_one_speed():
    angle = 2e-3 * np.arange(50)
    found = speeds(np.stack([np.cos(angle), np.sin(angle), np.zeros(50)], axis=1), 0.5)
    np.testing.assert_allclose([*found.raw, *found.net, found.rms_raw, found.rms_net], 4e-3, rtol=1e-9)
    assert found.count == 49 and found.noise_share == 0.0


def test_walk_has_rayleigh_speeds():
    """Length of a step of two Gaussian coordinates of variance 2 D τ: quantiles of Rayleigh's law, scipy-free."""
    found = speeds(walk(40_000, 1e-5, np.random.default_rng(1)), 1.0, shares=(0.25, 0.5, 0.9))
    np.testing.assert_allclose(found.raw, np.sqrt(2e-5) * np.sqrt(-2.0 * np.log([0.75, 0.5, 0.1])), rtol=0.02)


def test_noise_alone_shows_no_net_speed():
    rng = np.random.default_rng(2)
    found = speeds(noisy(about_start(np.zeros((20_000, 2))), 0.01, rng), 2.0, noise_rad=0.01)
    np.testing.assert_allclose(found.rms_raw, found.noise, rtol=0.02)
    assert found.noise == pytest.approx(0.01) and found.net[0] == 0.0
    np.testing.assert_allclose(found.noise_share, 1.0 - np.exp(-1.0), atol=0.02)  # Rayleigh: share below its rms
    assert np.isnan(speeds_of_steps(np.full(5, 1e-3), 1.0, 0.01, coordinates=1).rms_net)


def test_gaps_and_faults():
    sop = about_start(np.array([[0.0, 0.0], [0.1, 0.0], [np.nan, 0.0], [5.0, 0.0], [5.1, 0.0]]))
    found = speeds(sop, 1.0)
    assert found.count == 2
    np.testing.assert_allclose(found.raw, 0.1, rtol=1e-9)
    none = speeds(sop[:1], 1.0)
    assert none.count == 0 and np.isnan(none.raw).all() and np.isnan(none.noise_share)
    with pytest.raises(ValueError, match="shape"):
        speeds(sop[:, :2], 1.0)
    with pytest.raises(ValueError, match="interval_s"):
        speeds(sop, 0.0)
