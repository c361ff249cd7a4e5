"""ER from the source's own flicker. All signals here are invented; each has a known leak and a known fault."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.signal import lfilter

from analysis.reduce.flicker import FlickerState, flicker_er

BRIGHT_SIGMA, DARK_SIGMA = 2e-8, 1e-9


def source(random, count=3600, flicker=1e-2, white=0.7):
    """A 1 mW source: half of its noise slow (1 min), half white from sample to sample."""
    memory = np.exp(-1 / 60)
    slow = lfilter([np.sqrt(1 - memory**2)], [1.0, -memory], random.standard_normal(count))
    return 1e-3 * (1 + flicker * (0.7 * slow + white * random.standard_normal(count)))


def ports(random, er_db, offset=3e-7, leak=None, count=3600, **fields):
    light = source(random, count, **fields)
    leak = 10 ** (-er_db / 10) if leak is None else leak
    bright = light + BRIGHT_SIGMA * random.standard_normal(count)
    return bright, leak * light + offset + DARK_SIGMA * random.standard_normal(count)


def measured(random, er_db, **fields):
    return flicker_er(*ports(random, er_db, **fields), bright_sigma=BRIGHT_SIGMA)


def test_false_light_does_not_matter():
    """Job paper, finding 3: 0.3 uW on 1 mW makes a true 40 dB read 34.0 dB; the slope gives 40 dB and the 0.3 uW."""
    random = np.random.default_rng(1)
    bright, dark = ports(random, 40.0)
    np.testing.assert_allclose(10 * np.log10(bright.mean() / dark.mean()), 34.0, atol=0.05)
    found = flicker_er(bright, dark, bright_sigma=BRIGHT_SIGMA)
    assert found.state is FlickerState.MEASURED and abs(found.er_db - 40.0) < 4 * found.er_sigma_db < 0.6
    assert abs(found.offset - 3e-7) < 4 * found.offset_sigma < 1.5e-8


@pytest.mark.parametrize("er_db", [20.0, 30.0, 35.0])
@pytest.mark.parametrize("flicker", [1e-3, 1e-2])
def test_no_bias_and_an_honest_sigma(er_db, flicker):
    """300 invented hours each: mean within 0.02 dB, and the scatter is the sigma that is said."""
    random = np.random.default_rng(int(er_db) + int(1e4 * flicker))
    found = [measured(random, er_db, flicker=flicker) for _ in range(300)]
    score = np.array([(one.leak - 10 ** (-er_db / 10)) / one.leak_sigma for one in found])
    assert abs(score.mean()) < 0.2 and 0.88 < score.std() < 1.12
    assert np.mean([one.state is FlickerState.MEASURED for one in found]) > 0.98


def test_noise_of_the_bright_port_does_not_flatten_the_slope():
    """Reliability 0.9: plain least squares would read 10 % low (0.46 dB high)."""
    random = np.random.default_rng(3)
    light = 1e-3 + 6e-8 * random.standard_normal(86_400)
    bright = light + 2e-8 * random.standard_normal(len(light))
    found = flicker_er(bright, 0.1 * light, bright_sigma=2e-8)
    np.testing.assert_allclose([found.reliability, found.leak], [0.9, 0.1], rtol=0.01)
    plain = np.polyfit(np.diff(bright), np.diff(0.1 * light), 1)[0]
    assert plain < 0.092


@given(st.floats(-1e-3, 1e-3), st.floats(-1e-10, 1e-10), st.floats(0.01, 100.0))
def test_any_zero_drift_and_power_scale(zero, drift, factor):
    """Neither a zero nor its steady drift nor the unit changes the slope."""
    bright, dark = ports(np.random.default_rng(4), 25.0, count=600)
    one = flicker_er(bright, dark, bright_sigma=BRIGHT_SIGMA)
    other = flicker_er(factor * bright, factor * (dark + zero + drift * np.arange(600)), bright_sigma=factor * BRIGHT_SIGMA)
    np.testing.assert_allclose(other.er_db, one.er_db, atol=1e-6)


def test_changing_leak_gives_its_mean():
    random = np.random.default_rng(5)
    leak = 1e-3 * (1 + 0.3 * np.sin(np.arange(3600) / 300))
    found = measured(random, None, leak=leak)
    np.testing.assert_allclose(found.leak, leak.mean(), atol=5 * found.leak_sigma)


def test_a_gap_is_never_bridged():
    """The source steps by 30 % and the zero by 1 uW while nobody looks."""
    random = np.random.default_rng(6)
    bright, dark = ports(random, 30.0)
    bright[1800:] *= 1.3
    dark[1800:] = dark[1800:] * 1.3 + 1e-6
    at_s = np.arange(3600.0) + np.where(np.arange(3600) >= 1800, 600.0, 0.0)
    found = flicker_er(bright, dark, at_s, bright_sigma=BRIGHT_SIGMA)
    assert found.state is FlickerState.MEASURED and found.count == 3598
    assert abs(found.er_db - 30.0) < 4 * found.er_sigma_db
    assert flicker_er(bright, dark, bright_sigma=BRIGHT_SIGMA).state is FlickerState.ONE_STEP


def test_lost_readings_are_left_out():
    bright, dark = ports(np.random.default_rng(7), 30.0)
    bright[[5, 100]], dark[200] = np.nan, np.inf
    found = flicker_er(bright, dark, bright_sigma=BRIGHT_SIGMA)
    assert found.count == 3599 - 6 and abs(found.er_db - 30.0) < 4 * found.er_sigma_db


def test_quiet_source_is_not_measurable():
    found = measured(np.random.default_rng(8), 30.0, flicker=3e-5)
    assert found.state is FlickerState.TOO_QUIET and np.isnan(found.er_db) and found.reliability < 0.8


def test_too_few_changes():
    found = measured(np.random.default_rng(9), 30.0, count=60)
    assert found.state is FlickerState.TOO_FEW and found.count == 59
    assert flicker_er(np.array([]), np.array([]), bright_sigma=1.0).state is FlickerState.TOO_FEW


def test_dark_port_that_does_not_follow_gives_a_bound():
    """No leak at all: at least 40 dB or so, never infinite; the bound holds the truth in 95 of 100."""
    random = np.random.default_rng(10)
    found = [measured(random, None, leak=3e-5, flicker=1e-3) for _ in range(300)]
    bounds = [one for one in found if one.state is FlickerState.BOUND]
    assert len(bounds) > 100 and all(one.is_lower_bound and np.isnan(one.er_sigma_db) for one in bounds)
    assert all(35.0 < one.er_db < -10 * np.log10(3e-5) + 6 for one in bounds)
    assert np.mean([one.er_db <= -10 * np.log10(3e-5) for one in bounds]) > 0.93


def test_hum_on_the_dark_port_is_not_noise():
    bright, dark = ports(np.random.default_rng(11), 30.0)
    found = flicker_er(bright, dark + 3e-7 * np.sin(np.arange(3600) * 2 * np.pi / 25), bright_sigma=BRIGHT_SIGMA)
    assert found.state is FlickerState.NOT_WHITE and abs(found.far_autocorrelation) > 0.2 and np.isnan(found.er_db)


def test_saturating_dark_port_is_not_linear():
    random = np.random.default_rng(12)
    bright, dark = ports(random, 20.0, flicker=5e-2, white=1.0)
    bent = dark - 0.3 * np.maximum(dark - np.median(dark), 0.0)
    found = flicker_er(bright, bent, bright_sigma=BRIGHT_SIGMA)
    assert found.state is FlickerState.NOT_LINEAR and found.bend < -0.1


def test_mode_hop_carries_the_slope():
    """A hop changes power and leak at once; its one step would pose as flicker."""
    bright, dark = ports(np.random.default_rng(13), 30.0, flicker=1e-3)
    bright[2000:] *= 1.05
    dark[2000:] *= 1.5
    assert flicker_er(bright, dark, bright_sigma=BRIGHT_SIGMA).state is FlickerState.ONE_STEP


def test_gain_and_leakage_are_taken_off():
    random = np.random.default_rng(14)
    light, matrix = source(random), np.array([[0.97, 0.0005], [0.0006, 0.96]])
    seen = matrix @ np.array([light, 1e-2 * light])
    dark = seen[1] / 1.2 + 1e-9 * random.standard_normal(3600)
    found = flicker_er(seen[0], dark, bright_sigma=1e-9, gain_ratio=1.2, leakage=matrix)
    np.testing.assert_allclose(found.leak, 1e-2, rtol=1e-3)
    unsure = flicker_er(seen[0], seen[1], bright_sigma=1e-9, leakage=matrix, leakage_sigma=[[0, 0], [1e-4, 0]])
    np.testing.assert_allclose(unsure.leak_sigma, 1e-4 / 0.96, rtol=0.01)


def test_steady_ports_are_too_quiet():
    assert flicker_er(np.ones(500), np.ones(500), bright_sigma=1e-9).state is FlickerState.TOO_QUIET


@pytest.mark.parametrize(("call", "word"), [
    (lambda: flicker_er(np.ones(3), np.ones(4), bright_sigma=1.0), "shape"),
    (lambda: flicker_er(np.ones(3), np.ones(3), bright_sigma=0.0), "bright_sigma"),
    (lambda: flicker_er(np.ones(3), np.ones(3), np.array([0.0, 2.0, 1.0]), bright_sigma=1.0), "rise"),
])  # fmt: skip
def test_impossible_inputs_are_refused(call, word):
    with pytest.raises(ValueError, match=word):
        call()
