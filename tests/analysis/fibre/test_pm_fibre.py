"""PM fibre: beat length, thermal phase, and the leak between two misaligned ends."""

import numpy as np
import pytest

from analysis.fibre.jones import jones_retarder, jones_state
from analysis.fibre.pm_fibre import PmLink, beat_length_m, er_of_coupling_db, phase_rad, phase_slope_rad_per_k


@pytest.mark.parametrize(("birefringence", "wavelength_nm", "beat_mm"), [
    (3.5e-4, 1550.0, 4.4285714286), (4e-4, 980.0, 2.45), (3e-4, 633.0, 2.11)])
def test_beat_length(birefringence, wavelength_nm, beat_mm):
    """L_B = wavelength / B, the definition; values computed by hand."""
    assert 1e3 * beat_length_m(birefringence, wavelength_nm * 1e-9) == pytest.approx(beat_mm, rel=1e-9)


def test_phase_of_two_metres():
    """2 m at L_B = 4.42857 mm: 2837.567558 rad; with -1e-3/K a turn takes 2.214 K (from memory, computed)."""
    phase = phase_rad(2.0, 4.428571428571429e-3)
    assert phase == pytest.approx(2837.56755808, rel=1e-9)
    assert 2 * np.pi / (phase * 1e-3) == pytest.approx(2.21428571429, rel=1e-9)


@pytest.mark.parametrize(("wavelength_nm", "low", "high"), [(1550.0, 2.15, 2.41), (780.0, 4.27, 4.8)])
def test_thermal_phase_lies_in_the_published_range(wavelength_nm, low, high):
    """dB/dT = -5.3e-7 … -5.9e-7 per K (Opt. Lett. 36, 2173 (2011), abstract): 2.15 … 2.4 rad/(K m) at 1550 nm."""
    assert low <= abs(phase_slope_rad_per_k(1.0, wavelength_nm * 1e-9)) <= high


@pytest.mark.parametrize(("h_per_m", "length_m", "er_db"), [
    (1e-5, 1000.0, 20.00014476), (1e-4, 1000.0, 10.0144428), (1e-5, 100.0, 30.00000145), (1e-3, 1000.0, 1.182763971)])
def test_er_of_distributed_coupling(h_per_m, length_m, er_db):
    """-10 log10 tanh(hL), coupled-power equations (from memory; checked with an ODE solver)."""
    assert er_of_coupling_db(h_per_m, length_m) == pytest.approx(er_db, abs=1e-6)


@pytest.mark.parametrize(("alpha_deg", "beta_deg", "worst_db"), [(1.5, 1.5, 25.6), (1.0, 1.0, 29.1), (2.0, 2.0, 23.1)])
def test_leak_swings_between_difference_and_sum(alpha_deg, beta_deg, worst_db):
    """Worst case of two ends: the angles add, ER = -20 log10 tan(α + β): 25.6, 29.1, 23.1 dB (calculated)."""
    link = PmLink(launch_rad=np.radians(alpha_deg), exit_rad=np.radians(beta_deg))
    leak = link.crossed_fraction(np.linspace(0, 2 * np.pi, 721))
    assert leak.max() == pytest.approx(np.sin(np.radians(alpha_deg + beta_deg)) ** 2, rel=1e-9)
    assert leak.min() == pytest.approx(np.sin(np.radians(alpha_deg - beta_deg)) ** 2, abs=1e-12)
    assert -10 * np.log10(leak.max() / (1 - leak.max())) == pytest.approx(worst_db, abs=0.06)


def test_leak_is_that_of_the_jones_product():
    """Light at azimuth α into a retarder along x, read at a splitter turned by β: |<crossed|state>|²."""
    alpha, beta = np.radians(2.6), np.radians(1.1)
    phase = np.linspace(-7, 7, 101)
    after = (jones_retarder(phase, 0.0) @ jones_state(alpha, 0.0)[:, None])[..., 0]
    crossed = jones_state(np.pi / 2 + beta, 0.0)
    expected = np.abs(after @ np.conj(crossed)) ** 2
    leak = PmLink(launch_rad=alpha, exit_rad=beta).crossed_fraction(phase)
    np.testing.assert_allclose(leak, expected, atol=1e-12)
