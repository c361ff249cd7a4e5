"""Diffusion constant and linewidth."""

import numpy as np
import pytest

from analysis.drift.diffusion import diffusion_from_angles, diffusion_of, diffusion_of_steps
from tests.analysis.drift.walks import about_start, noisy, walk
from tests.reference.values import close, reference


def test_from_four_steps():
    row = reference("T05-D-est")
    found = diffusion_from_angles(np.array([*row["inputs"]["steps_rad"], np.nan]), row["inputs"]["dt"])
    np.testing.assert_allclose(found.diffusion, row["expected"], **close(row))
    assert found.steps == 4 and found.diffusion_low < found.diffusion < found.diffusion_high


def test_interval_of_plain_steps_holds_the_truth():
    """2 N D̂/D is chi-squared with 2 N degrees of freedom: 95 % of 400 records of 20 steps, 3 sigma 3.3 %."""
    rng = np.random.default_rng(1)
    steps = np.sqrt(2e-4) * rng.standard_normal((400, 20, 2))
    found = [diffusion_from_angles(np.linalg.norm(one, axis=1), 1.0) for one in steps]
    assert 0.915 <= np.mean([one.diffusion_low <= 1e-4 <= one.diffusion_high for one in found]) <= 0.985


@pytest.mark.parametrize("noise_rad", [0.0, 0.004, 0.02])
def test_estimate_is_unbiased_and_its_interval_holds_the_truth(noise_rad):
    """150 walks of 300 states, D = 1e-5 rad²/s, with reading noise up to five times a step; 3 sigma of 95 % is 5.3 %."""
    rng = np.random.default_rng(2)
    found = [diffusion_of(noisy(walk(300, 1e-5, rng), noise_rad, rng), 1.0) for _ in range(150)]
    inside = [one.diffusion_low <= 1e-5 <= one.diffusion_high for one in found]
    assert 0.89 <= np.mean(inside) <= 1.0
    np.testing.assert_allclose(np.mean([one.diffusion for one in found]), 1e-5, rtol=0.12)
    if noise_rad:
        np.testing.assert_allclose(np.mean([one.noise_rad for one in found]), noise_rad, rtol=0.02)


def test_means_over_spans_and_a_gap_change_nothing_but_the_width():
    """30 walks of 200 means over 20 readings each, with a gap: not too sure, and hardly biased.

    The noise is held at 0 or above, which lowers D a little where it is far below a step.
    """
    rng = np.random.default_rng(3)
    found = []
    for _ in range(30):
        means = noisy(walk(4000, 1e-5, rng), 0.004, rng).reshape(-1, 20, 3).mean(axis=1)
        means /= np.linalg.norm(means, axis=1, keepdims=True)
        means[80:90] = np.nan
        found.append(diffusion_of(means, 20.0, averaged=20))
    assert {one.steps for one in found} == {79 + 109}
    np.testing.assert_allclose(np.mean([one.diffusion for one in found]), 1e-5, rtol=0.1)
    assert sum(one.diffusion_low <= 1e-5 <= one.diffusion_high for one in found) >= 25


def test_a_walk_all_round_the_sphere_is_measured_too():
    found = diffusion_of(walk(3000, 1e-2, np.random.default_rng(4)), 1.0)
    assert found.diffusion_low <= 1e-2 <= found.diffusion_high


def test_still_light_may_have_none():
    rng = np.random.default_rng(5)
    found = diffusion_of(noisy(about_start(np.zeros((400, 2))), 0.01, rng), 1.0)
    assert found.diffusion_low == 0.0 and found.diffusion_high < 1e-6
    assert found.decorrelation_s[2] == np.inf and found.linewidth_hz[1] == 0.0
    still = diffusion_of_steps(np.zeros((30, 2)), 1.0)
    assert still.diffusion == still.diffusion_high == 0.0


def test_linewidth_and_decorrelation_follow():
    found = diffusion_from_angles(np.full(50, 0.02), 1.0)
    np.testing.assert_allclose(found.linewidth_hz[0], found.diffusion / (4 * np.pi))
    low, high = found.decorrelation_s[1:]
    assert low < found.decorrelation_s[0] < high


def test_nothing_and_faults():
    assert diffusion_of(np.full((4, 3), np.nan), 1.0).steps == 0
    assert np.isnan(diffusion_from_angles(np.zeros(0), 1.0).diffusion)
    with pytest.raises(ValueError, match="shape"):
        diffusion_of(np.zeros((4, 2)), 1.0)
    with pytest.raises(ValueError, match="interval_s"):
        diffusion_from_angles(np.ones(3), 0.0)
    with pytest.raises(ValueError, match="level"):
        diffusion_from_angles(np.ones(3), 1.0, level=2.0)
