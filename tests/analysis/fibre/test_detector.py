"""Detectors: zero, step, top; the leaky splitter."""

import numpy as np
import pytest

from analysis.fibre.detector import Detector, split_powers


def test_a_dark_detector_reads_its_zero_and_it_doubles_in_ten_kelvin():
    detector = Detector(zero=0.3)
    read = detector.read(np.zeros(2), np.array([21.0, 31.0]), np.zeros(2))
    np.testing.assert_allclose(read, [0.3, 0.6])


def test_it_clips_at_the_top_and_rounds_to_its_step():
    detector = Detector(units_per_w=1e6, top=5.0, step=0.5)
    np.testing.assert_allclose(detector.read(np.array([9e-6, 1.3e-6]), np.full(2, 21.0), np.zeros(2)), [5.0, 1.5])


def test_noise_has_the_declared_width():
    white = np.random.default_rng(4).standard_normal(20000)
    read = Detector(noise=2e-9).read(np.zeros(20000), np.full(20000, 21.0), white)
    assert read.std() == pytest.approx(2e-9, rel=0.03)


def test_splitter_leakage_caps_the_ratio():
    """0.1 % wrong light in the dark port of pure light: 30 dB, by 10 log10(a / c)."""
    bright, dark = split_powers(np.array([1e-3]), np.array([0.0]), np.array([[1.0, 0.0], [0.001, 1.0]]))
    assert 10 * np.log10(bright[0] / dark[0]) == pytest.approx(30.0)
