"""What raw powers are called improbable, and that sound ones never are."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.quantities import dbm_from_watts
from analysis.reduce.plausible import Oddity, oddity_of

FLICKER = 1.0 + 1e-3 * np.sin(np.arange(30) * 1.7)


@pytest.mark.parametrize(
    ("level", "unit", "oddity"),
    [
        (1e-3, "W", None),
        (1.0, "mW", None),
        (1000.0, "W", Oddity.TOO_STRONG),
        (1e9, "uW", Oddity.TOO_STRONG),
        (41.0, "dBm", Oddity.TOO_STRONG),
        (-30.0, "dBm", None),
        (-30.0, "W", Oddity.LOOKS_LOGARITHMIC),
        (-12.0, "mW", Oddity.LOOKS_LOGARITHMIC),
        (-1e-6, "W", Oddity.NEGATIVE),
        (-0.3, "V", Oddity.NEGATIVE),
        (1e-3, "dBm", Oddity.LOOKS_LINEAR),
        (1e-16, "W", Oddity.TOO_WEAK),
        (1e6, "count", None),
        (1000.0, "V", None),
    ],
)
def test_levels(level, unit, oddity):
    assert oddity_of(level * FLICKER, unit) == oddity


def test_a_frozen_value_is_told_after_ten():
    assert oddity_of(np.full(9, 1e-3), "W") is None
    assert oddity_of(np.full(10, 1e-3), "W") is Oddity.CONSTANT


def test_nothing_says_nothing():
    assert oddity_of(np.array([]), "W") is None
    assert oddity_of(np.array([np.nan]), "W") is None


@given(st.floats(1e-12, 5.0))
def test_powers_of_a_laboratory_are_never_odd_in_any_unit(power_w):
    """From 1 pW to 5 W; near 0 dBm a logarithmic reading may look linear, which is asked and not refused."""
    for unit, factor in (("W", 1.0), ("mW", 1e3), ("uW", 1e6)):
        assert oddity_of(power_w * factor * FLICKER, unit) is None
    assert oddity_of(dbm_from_watts(power_w * FLICKER), "dBm") in (None, Oddity.LOOKS_LINEAR)
