"""Bend birefringence against the published coefficient."""

import numpy as np
import pytest

from analysis.fibre.bend import bend_coefficient, bend_retardance_rad, twist_turn_rad
from tests.reference.values import close, reference


def test_coefficient_from_photoelastic_constants():
    """n 1.45, p11 0.121, p12 0.270, ν 0.17 → 0.13287 against 0.133 (Ulrich, Rashleigh, Eickhoff 1980, from memory)."""
    assert bend_coefficient(1.45, 0.121, 0.270, 0.17) == pytest.approx(0.13286669906, rel=1e-9)


@pytest.mark.parametrize(("radius_mm", "wavelength_nm", "degrees"), [
    (10, 633, 185.648), (20, 850, 69.1266), (25, 1310, 35.8825), (40, 1550, 18.9541), (10, 1550, 75.8163)])
def test_degrees_per_turn(radius_mm, wavelength_nm, degrees):
    """125 µm fibre, computed from dn = 0.133 (r/R)² (Opt. Lett. 5, 273 (1980), from memory)."""
    turn = bend_retardance_rad(radius_mm * 1e-3, 1, wavelength_nm * 1e-9)
    assert np.degrees(turn) == pytest.approx(degrees, rel=1e-5)


def test_twist_turns_the_azimuth_by_a_few_per_cent():
    assert np.degrees(twist_turn_rad(np.radians(100.0))) == pytest.approx(8.0)


def test_table_of_degrees_per_turn():
    """Radii × wavelengths at once, 125 µm fibre (values computed apart from dn = 0.133 (r/R)²)."""
    row = reference("T10-bend-table")
    radius_m = 1e-3 * np.array(row["inputs"]["R_mm"])
    for wavelength_nm, expected in row["expected"].items():
        turn_rad = bend_retardance_rad(radius_m, 1.0, float(wavelength_nm) * 1e-9)
        np.testing.assert_allclose(np.degrees(turn_rad), expected, **close(row))


def test_no_radius_gives_no_retardance():
    assert np.isnan(bend_retardance_rad(0.0, 1.0, 1.55e-6)) and np.isnan(bend_retardance_rad([0.02, -1.0], 1, 1.55e-6)[1])
