"""Red background of a periodogram."""

import numpy as np
import pytest

from analysis.drift.background import LOWEST, red_background


def test_a_steep_power_law_is_followed():
    """Exponential powers about f^-2, one per independent frequency."""
    cycles = np.arange(1, 2001)
    ratio = []
    for seed in range(50):
        power = cycles**-2.0 * np.random.default_rng(seed).exponential(size=len(cycles))
        found = red_background(power, 1)
        ratio.append(found.level[LOWEST - 1:] * cycles[LOWEST - 1:] ** 2.0)
    middle = np.median(ratio, axis=0)
    np.testing.assert_allclose(middle[20:], 1.0, atol=0.2)
    np.testing.assert_allclose(middle[:20], 1.0, atol=0.4)


def test_a_line_does_not_lift_its_background():
    power = np.random.default_rng(0).exponential(size=500)
    lined = power.copy()
    lined[99] = 300.0
    np.testing.assert_allclose(red_background(lined, 1).level[90:110], red_background(power, 1).level[90:110], rtol=0.3)
    assert red_background(lined, 1).chance[99] < 1e-3


def test_slow_frequencies_are_never_lines():
    found = red_background(np.full(100, 1e-3), 5)
    assert np.all(found.chance[:5 * LOWEST - 1] == 1.0) and np.isnan(found.level[:5 * LOWEST - 1]).all()
    assert np.all(red_background(np.ones(20), 5).chance == 1.0)
    assert found.chance.max() == pytest.approx(1.0)
