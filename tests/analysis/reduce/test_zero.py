"""Zeros from blocked beams: right mean and error, refused where not steady or not dark."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.reduce.zero import LEAST_READINGS, Unfit, bright_level, dark_stretches, mean_error, port_zero

BRIGHT = 1e-3
SECOND_US = 1_000_000


def noise(count: int, seed: int = 7) -> np.ndarray:
    return np.random.default_rng(seed).normal(size=count)


def test_mean_error_and_spread_of_white_noise():
    """Standard error sigma / sqrt(N): GUM (JCGM 100:2008), 4.2.3; from memory."""
    zero = port_zero(3e-7 + 1e-9 * noise(400), BRIGHT)
    assert zero.unfit == ()
    assert zero.mean == pytest.approx(3e-7, abs=4 * 1e-9 / 20)
    assert zero.sigma == pytest.approx(1e-9, rel=0.1)
    assert 1e-9 / 20 * 0.9 <= zero.error <= 1e-9 / 20 * 2.2


def test_the_error_covers_the_truth_of_slow_noise_where_the_naive_one_does_not():
    """First-order autoregressive noise, phi = 0.9: the true error of the mean is sqrt((1 + phi)/(1 - phi)) = 4.36 times the
    naive one for long series (Box, Jenkins, Time Series Analysis; from memory). Eight batches of 50 see most of it."""
    rng, ratios, naive = np.random.default_rng(11), [], []
    for _ in range(300):
        kicks = rng.normal(size=500)
        values = np.zeros(500)
        for place in range(1, 500):
            values[place] = 0.9 * values[place - 1] + kicks[place]
        kept = values[100:]
        ratios.append(kept.mean() / mean_error(kept))
        naive.append(kept.mean() / (kept.std(ddof=1) / np.sqrt(len(kept))))
    assert np.std(naive) > 3.5
    assert np.std(ratios) < 1.7


@pytest.mark.parametrize(
    ("raw", "unfit"),
    [
        (3e-7 + 1e-9 * noise(LEAST_READINGS - 1), Unfit.TOO_FEW),
        (3e-7 + 1e-9 * noise(60) + np.linspace(0.0, 2e-8, 60), Unfit.NOT_STEADY),
        (np.where(np.arange(60) == 41, BRIGHT / 3, 3e-7 + 1e-9 * noise(60)), Unfit.NOT_STEADY),
        (BRIGHT * (0.02 + 1e-5 * noise(60)), Unfit.NOT_DARK),
        (BRIGHT * (-0.02 + 1e-5 * noise(60)), Unfit.NOT_DARK),
    ],
)
def test_what_is_not_fit_is_refused_by_name(raw, unfit):
    zero = port_zero(raw, BRIGHT)
    assert unfit in zero.unfit and zero.is_refused


def test_without_known_light_it_is_said_and_not_refused():
    zero = port_zero(3e-7 + 1e-9 * noise(60), None)
    assert zero.unfit == (Unfit.NO_LIGHT_KNOWN,) and not zero.is_refused


def test_a_frozen_converter_gives_a_zero_and_says_that_its_spread_says_nothing():
    zero = port_zero(np.full(30, 2.0), 4000.0)
    assert (zero.mean, zero.sigma, zero.is_frozen, zero.unfit) == (2.0, 0.0, True, ())


def test_steady_noise_is_seldom_refused():
    refused = sum(port_zero(3e-7 + 1e-9 * noise(60, seed), BRIGHT).is_refused for seed in range(500))
    assert refused <= 2


@given(st.floats(-1e-6, 1e-6), st.floats(1e-12, 1e-8), st.floats(1e-3, 1e6))
def test_scale_changes_nothing(level, spread, scale):
    raw = level + spread * noise(50)
    one, other = port_zero(raw, BRIGHT), port_zero(raw * scale, BRIGHT * scale)
    np.testing.assert_allclose([other.mean, other.error, other.sigma], np.array([one.mean, one.error, one.sigma]) * scale,
                               rtol=1e-6, atol=1e-12 * scale)


def course(dark: slice, count: int = 600) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    port1, port2 = BRIGHT * (1 + 1e-3 * noise(count)), 1e-6 + 1e-9 * noise(count)
    port1[dark], port2[dark] = 2e-7 + 1e-9 * noise(count)[dark], 3e-7 + 1e-9 * noise(count)[dark]
    return np.arange(count, dtype=np.int64) * SECOND_US, port1, port2


def test_a_blocked_beam_in_the_past_is_found_without_its_ends():
    at_us, port1, port2 = course(slice(100, 160))
    assert dark_stretches(at_us, port1, port2, least_s=20, longest_gap_s=3) == [(101 * SECOND_US, 158 * SECOND_US)]


def test_a_gap_ends_a_dark_stretch_and_a_short_one_is_left():
    at_us, port1, port2 = course(slice(100, 160))
    at_us[130:] += 60 * SECOND_US
    assert dark_stretches(at_us, port1, port2, least_s=20, longest_gap_s=3) == [
        (101 * SECOND_US, 128 * SECOND_US), (191 * SECOND_US, 218 * SECOND_US)]
    assert dark_stretches(at_us, port1, port2, least_s=30, longest_gap_s=3) == []


def test_a_dark_port_alone_is_never_called_dark():
    """High extinction is not darkness: port 1 is bright."""
    at_us, port1, port2 = course(slice(0, 0))
    assert dark_stretches(at_us, port1, port2, least_s=1, longest_gap_s=3) == []
    assert dark_stretches(at_us, np.full(600, np.nan), port2, least_s=1, longest_gap_s=3) == []
    assert bright_level(np.full(600, np.nan), port2) is None
