"""The random walk against the closed solutions of Brownian motion on a sphere."""

import numpy as np
import pytest

from analysis.fibre.sphere import angle_between_rad, turned
from analysis.fibre.walk import diffusion_rad2_per_s, walk_rotations


@pytest.mark.parametrize(("time_s", "cosine", "p2", "angle_squared"), [
    (1, 0.980198673, 0.941764534, 0.0398664875), (10, 0.818730753, 0.548811636, 0.38647305),
    (50, 0.367879441, 0.0497870684, 1.62723853),
])
def test_spread_follows_the_published_law(time_s, cosine, p2, angle_squared):
    """E P_l = exp(-l(l+1) D t), D = 0.01 (Perrin 1928; Roberts & Ursell 1960, from memory; re-computed).

    4,000 walkers of 0.1 s steps; tolerances are 4 standard errors of the sample itself.
    """
    rng = np.random.default_rng(time_s)
    start = np.array([0.0, 0.0, 1.0])
    ends = np.array([turned(walk_rotations(time_s * 10, 0.1, 0.01, rng)[-1], start) for _ in range(4000)])
    cosines, angles = ends @ start, angle_between_rad(ends, start)
    for sample, expected in ((cosines, cosine), (1.5 * cosines**2 - 0.5, p2), (angles**2, angle_squared)):
        assert sample.mean() == pytest.approx(expected, abs=4 * sample.std() / np.sqrt(4000) + 1e-3)


def test_rms_angle_names_the_diffusion():
    """2.3° per √h is D = (2.3°)²/(4 · 3600 s); rms after an hour is then 2.3°."""
    diffusion = diffusion_rad2_per_s(np.radians(2.3), 3600.0)
    rng = np.random.default_rng(1)
    start = np.array([1.0, 0.0, 0.0])
    angles = [angle_between_rad(turned(walk_rotations(60, 60.0, diffusion, rng)[-1], start), start) for _ in range(3000)]
    assert np.degrees(np.sqrt(np.mean(np.square(angles)))) == pytest.approx(2.3, rel=0.05)


def test_same_seed_same_walk():
    one, other = (walk_rotations(100, 1.0, 1e-4, np.random.default_rng(8)) for _ in range(2))
    np.testing.assert_array_equal(one, other)
