"""Jones vectors against worked values (Collett, Goldstein conventions; from memory, re-derived)."""

import numpy as np
import pytest

from analysis.fibre.jones import jones_retarder, jones_rotator, jones_state, stokes_of_jones
from analysis.fibre.sphere import sop_of_angles
from tests.reference.values import close, reference


def test_stokes_of_a_jones_vector():
    """T02-jones-01: Ex = 0.8, |Ey| = 0.6, δ = 60° (E. Collett, Polarized Light in Fiber Optics, 2003, convention)."""
    row = reference("T02-jones-01")
    x = row["inputs"]
    field = np.array([x["Ex"], x["Ey_abs"] * np.exp(1j * np.radians(x["delta_deg"]))])
    np.testing.assert_allclose(stokes_of_jones(field), row["expected"], **close(row))


@pytest.mark.parametrize(("azimuth_deg", "ellipticity_deg", "expected"), [
    (20, 10, [0.7198463103929542, 0.6040227735550536, 0.3420201433256687]),
    (-35, -40, [0.05939117461388475, -0.16317591116653488, -0.984807753012208]),
    (90, 0, [-1.0, 0.0, 0.0]),
    (45, 22.5, [0.0, 0.7071067811865476, 0.7071067811865475]),
])
def test_state_of_angles(azimuth_deg, ellipticity_deg, expected):
    """s = (cos 2χ cos 2ψ, cos 2χ sin 2ψ, sin 2χ), values computed with mpmath; two code paths agree with them."""
    angles = np.radians([azimuth_deg, ellipticity_deg])
    np.testing.assert_allclose(stokes_of_jones(jones_state(*angles))[1:], expected, atol=1e-12)
    np.testing.assert_allclose(sop_of_angles(*angles), expected, atol=1e-12)


def test_half_wave_plate_mirrors_azimuth_and_ellipticity():
    """T02-hwp-01: a half-wave plate at 17° turns azimuth 40°, ellipticity 12° into 2·17 - 40 = -6° and -12°."""
    row = reference("T02-hwp-01")
    plate, psi, chi = np.radians([row["inputs"][name] for name in ("theta_deg", "psi_deg", "chi_deg")])
    out = stokes_of_jones(jones_retarder(np.pi, plate) @ jones_state(psi, chi))
    expected = np.radians([row["expected"]["psi_out_deg"], row["expected"]["chi_out_deg"]])
    np.testing.assert_allclose(out[1:], sop_of_angles(*expected), atol=1e-12)


def test_elements_keep_the_power():
    rng = np.random.default_rng(3)
    chain = jones_retarder(rng.uniform(0, 9, 50), rng.uniform(-3, 3, 50)) @ jones_rotator(rng.uniform(-3, 3, 50))
    identity = chain @ np.conj(np.swapaxes(chain, -1, -2))
    np.testing.assert_allclose(identity, np.broadcast_to(np.eye(2), (50, 2, 2)), atol=1e-12)
