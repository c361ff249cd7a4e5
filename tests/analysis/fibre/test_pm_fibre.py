"""PM fibre: beat length, thermal phase, and the leak between two misaligned ends."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from analysis.fibre.jones import jones_retarder, jones_state
from analysis.fibre.pm_fibre import (
    PmLink,
    beat_length_m,
    coupling_of_er_per_m,
    er_of_coupling_db,
    er_range_db,
    kelvin_per_turn,
    phase_rad,
    phase_slope_rad_per_k,
    relative_slope_per_k,
)
from tests.reference.values import close, reference, references


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


def test_kelvin_per_turn():
    """2 m at L_B = 4.42857 mm and γ = -1e-3/K: 2.214 K; no response: never."""
    row = reference("T09-temp")
    given_values = row["inputs"]
    got = kelvin_per_turn(given_values["L_m"], given_values["L_B_mm"] * 1e-3, given_values["gamma_per_K"])
    np.testing.assert_allclose(got, row["expected"]["K_per_turn"], **close(row))
    assert np.isinf(kelvin_per_turn(2.0, 4e-3, 0.0))
    slope = relative_slope_per_k(3.5e-4, -3.5e-7)
    turn_k = float(kelvin_per_turn(2.0, 1.55e-6 / 3.5e-4, slope))
    assert phase_slope_rad_per_k(2.0, 1.55e-6, -3.5e-7) * turn_k == pytest.approx(-2 * np.pi)


@pytest.mark.parametrize(("launch_deg", "exit_deg", "worst_db", "best_db"), [
    (3.0, 2.0, 21.16, 35.16), (1.5, 1.5, 25.61, np.inf), (2.0, 0.0, 29.14, 29.14), (-3.0, 2.0, 21.16, 35.16)])
def test_best_and_worst_over_the_phase(launch_deg, exit_deg, worst_db, best_db):
    """-20 log10 tan(α ± β): 21.2 to 35.2 dB for 3° and 2° (calculated); the signs only say at which phase."""
    found = er_range_db(np.radians(launch_deg), np.radians(exit_deg))
    assert float(found.worst_db) == pytest.approx(worst_db, abs=0.01) and float(found.best_db) == pytest.approx(best_db, abs=0.01)


@settings(deadline=None)
@given(st.floats(-0.5, 0.5), st.floats(-0.25, 0.25))
def test_range_is_that_of_the_jones_product(launch_rad, exit_rad):
    """Against the leak over a full turn of the phase."""
    leak = PmLink(launch_rad=launch_rad, exit_rad=exit_rad).crossed_fraction(np.linspace(0, 2 * np.pi, 721))
    found = er_range_db(launch_rad, exit_rad)
    for er_db, share in ((found.worst_db, leak.max()), (found.best_db, leak.min())):
        ratio = 10.0 ** (-float(er_db) / 10.0)
        assert ratio / (1.0 + ratio) == pytest.approx(share, abs=1e-12)


def test_coupling_against_the_coupled_power_equations():
    """scipy's solver on dPx/dz = -h (Px - Py), dPy/dz = h (Px - Py) over 700 m at h = 4e-4/m; and back to h."""
    h = 4e-4
    end = solve_ivp(lambda _, p: [-h * (p[0] - p[1]), h * (p[0] - p[1])], (0, 700), [1.0, 0.0], rtol=1e-10, atol=1e-14).y[:, -1]
    er_db = er_of_coupling_db(h, 700.0)
    assert float(er_db) == pytest.approx(10 * np.log10(end[0] / end[1]), abs=1e-7)
    assert float(coupling_of_er_per_m(er_db, 700.0)) == pytest.approx(h, rel=1e-12)
    assert np.isnan(coupling_of_er_per_m(0.0, 700.0)) and np.isinf(er_of_coupling_db(0.0, 1.0))


@pytest.mark.parametrize("row", references("T09-h-"), ids=lambda row: row["id"])
def test_coupling_values(row):
    np.testing.assert_allclose(er_of_coupling_db(row["inputs"]["h_per_m"], row["inputs"]["L_m"]), row["expected"], **close(row))
