"""Images of mains hum."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.drift.hum import HumAlias, alias_hz, averaging_gain, covered_share, explain_lines, hum_aliases
from analysis.drift.lines import find_lines


def test_the_25_second_wave():
    """JOB 2b: 100 Hz ripple of 49.98 Hz mains, sampled at 1 Hz, is a wave of 25 s."""
    assert 1.0 / alias_hz(2 * 49.98, 1.0) == pytest.approx(25.0, rel=1e-9)
    match = explain_lines([0.04], 1.0, mains_hz=50.0)[0]
    assert match.harmonic == 4 and abs(match.implied_mains_hz - 50.0) == pytest.approx(0.01)
    only = explain_lines([0.04], 1.0, mains_hz=50.0, harmonics=(2,))[0]
    assert only.implied_mains_hz in (pytest.approx(49.98), pytest.approx(50.02)) and only.period_s == pytest.approx(25.0)


def test_a_sampled_ripple_is_found_and_explained():
    at_s = np.arange(3600.0)
    level = 1.0 + 0.08 * np.sin(2 * np.pi * 99.96 * at_s) + 0.02 * np.random.default_rng(0).normal(size=3600)
    line = find_lines((at_s * 1e6).astype(np.int64), level, high_hz=0.5).lines[0]
    assert line.period_s == pytest.approx(25.0, abs=0.01) and line.amplitude == pytest.approx(0.08, abs=0.002)
    match = explain_lines([line.frequency_hz], 1.0, mains_hz=50.0, tolerance_hz=0.05, harmonics=(2,))[0]
    assert match.chance == pytest.approx(0.2)


@given(st.floats(0, 500), st.floats(0.5, 100), st.integers(-3, 3))
def test_an_image_is_the_same_after_whole_samplings(frequency, sampling, turns):
    found = alias_hz(frequency, sampling)
    assert 0.0 <= found <= 0.5 * sampling + 1e-9
    assert alias_hz(frequency + turns * sampling, sampling) == pytest.approx(found, abs=1e-9)


@given(st.floats(49.8, 50.2), st.floats(0.3, 30), st.sampled_from([1, 2, 4]))
def test_every_mains_within_tolerance_lands_inside_its_image_and_is_explained(mains, sampling, harmonic):
    image = alias_hz(harmonic * mains, sampling)
    alias = hum_aliases(sampling, mains_hz=50.0, harmonics=(harmonic,))[0]
    assert alias.low_hz - 1e-9 <= image <= alias.high_hz + 1e-9
    assert alias.low_hz <= alias.nominal_hz <= alias.high_hz
    match = explain_lines([image], sampling, mains_hz=50.0, harmonics=(harmonic,), line_se_hz=1e-9)[0]
    assert alias_hz(harmonic * match.implied_mains_hz, sampling) == pytest.approx(image, abs=1e-7)
    assert abs(match.implied_mains_hz - 50.0) <= abs(mains - 50.0) + 1e-7


def test_a_line_far_from_every_image_is_not_explained():
    """At 30 Hz, 100 Hz appears at 10 Hz ± 0.4."""
    assert explain_lines([3.0, 10.1], 30.0, mains_hz=50.0, harmonics=(2,))[0].line_hz == 10.1
    assert len(explain_lines([3.0, 10.1], 30.0, mains_hz=50.0, harmonics=(2,))) == 1


def test_images_at_1_hz_cover_most_of_the_band():
    """100 Hz ± 0.4 Hz folds onto 0 … 0.4 of 0.5 Hz: a fit says little."""
    assert covered_share(hum_aliases(1.0, mains_hz=50.0, harmonics=(2,)), 1.0) == pytest.approx(0.8)
    assert covered_share((HumAlias(50, 1, 1, 1, 2), HumAlias(50, 2, 2, 1.5, 3)), 10.0) == pytest.approx(0.4)


def test_averaging_over_whole_cycles_removes_the_ripple():
    """20 ms is two cycles of 100 Hz; half a cycle leaves 2/π."""
    assert averaging_gain(100.0, 0.020) == pytest.approx(0.0, abs=1e-12)
    assert averaging_gain(100.0, 0.005) == pytest.approx(2 / np.pi) and averaging_gain(0.0, 1.0) == 1.0
    with pytest.raises(ValueError, match="sampling_hz=0"):
        alias_hz(50.0, 0)
