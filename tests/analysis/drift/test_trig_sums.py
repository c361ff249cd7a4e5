"""Fast trigonometric sums of uneven times."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.drift.trig_sums import trig_sums


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 300), st.floats(0.1, 1e6), st.integers(1, 400))
def test_they_are_the_plain_sums(seed, readings, span_s, count):
    random = np.random.default_rng(seed)
    at_s, weight = random.uniform(0, span_s, readings), random.normal(size=readings)
    step_hz = 0.2 / span_s
    expected = np.exp(2j * np.pi * step_hz * np.outer(np.arange(1, count + 1), at_s)) @ weight
    np.testing.assert_allclose(trig_sums(at_s, weight, step_hz, count), expected, rtol=0, atol=1e-10 * np.abs(weight).sum())


def test_even_times_give_the_discrete_fourier_transform():
    level = np.random.default_rng(0).normal(size=64)
    found = trig_sums(np.arange(64.0), level, 1 / 64, 31)
    np.testing.assert_allclose(np.conj(found), np.fft.rfft(level)[1:32], atol=1e-9)
    assert found[0] == pytest.approx(np.sum(level * np.exp(2j * np.pi * np.arange(64) / 64)), abs=1e-9)
