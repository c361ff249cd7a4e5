"""Extinction ratio on an axis from angles."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.fibre.jones import jones_state
from analysis.reduce.axis import (
    crosstalk_db,
    ellipticity_rad_from_er_db,
    er_db_from_ellipticity,
    er_db_from_misalignment,
    er_db_on_axis,
    misalignment_rad_from_er_db,
)
from tests.reference.values import close, reference, references


@pytest.mark.parametrize("row", references("T01-ang-er"), ids=lambda row: row["id"])
def test_misaligned_linear_light(row):
    """Law of Malus."""
    theta = np.radians(row["inputs"]["theta_deg"])
    np.testing.assert_allclose(er_db_from_misalignment([theta, -theta, np.pi - theta]), row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T01-er-ang"), ids=lambda row: row["id"])
def test_misalignment_of_an_er(row):
    """20 dB is 5.71 deg, 30 dB 1.81 deg: the trade's rule of thumb."""
    np.testing.assert_allclose(np.degrees(misalignment_rad_from_er_db(row["inputs"]["ER_dB"])), row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T01-ell"), ids=lambda row: row["id"])
def test_ellipse_on_the_analyser_axis(row):
    chi = np.radians(row["inputs"]["chi_deg"])
    np.testing.assert_allclose(er_db_from_ellipticity([chi, -chi]), row["expected"], **close(row))
    np.testing.assert_allclose(er_db_on_axis(0.3, chi, 0.3), row["expected"], **close(row))
    np.testing.assert_allclose(ellipticity_rad_from_er_db(row["expected"]), chi, rtol=1e-9)


@pytest.mark.parametrize("row", references("T01-gen"), ids=lambda row: row["id"])
def test_any_light_on_any_axis(row):
    x = row["inputs"]
    found = er_db_on_axis(*np.radians([x["psi_deg"], x["chi_deg"], x["psi0_deg"]]), x["DOP"])
    np.testing.assert_allclose(found, row["expected"], **close(row))


def test_share_of_all_light_is_another_figure():
    """T01-ang-sin-vs-tan: sin^2 instead of tan^2."""
    row = reference("T01-ang-sin-vs-tan")
    found = crosstalk_db(er_db_from_misalignment(np.radians(row["inputs"]["theta_deg"])))
    np.testing.assert_allclose(found, row["expected"], **close(row))


@given(st.floats(-2.0, 2.0), st.floats(-0.78, 0.78), st.floats(-2.0, 2.0), st.floats(0.0, 0.999))
def test_against_fields_projected_on_the_axis(psi, chi, axis, dop):
    """Jones projection plus half of the unpolarized part: another road to the same powers."""
    field = jones_state(psi, chi)
    wanted = np.abs(field @ [np.cos(axis), np.sin(axis)]) ** 2
    other = np.abs(field @ [-np.sin(axis), np.cos(axis)]) ** 2
    powers = [dop * power + 0.5 * (1 - dop) for power in (wanted, other)]
    np.testing.assert_allclose(er_db_on_axis(psi, chi, axis, dop), 10 * np.log10(powers[0] / powers[1]), atol=1e-8)


@given(st.floats(-60.0, 60.0))
def test_misalignment_and_er_are_inverse(er_db):
    np.testing.assert_allclose(er_db_from_misalignment(misalignment_rad_from_er_db(er_db)), er_db, atol=1e-6)


def test_limits():
    assert er_db_from_misalignment(0.0) == np.inf and er_db_from_ellipticity(0.0) == np.inf
    assert er_db_on_axis(0.2, 0.0, 0.2) == np.inf
    np.testing.assert_allclose(er_db_on_axis(1e-8, 0.0, 0.0), 160.0, atol=1e-6)  # no cancellation in 1 - cos
    assert np.isnan(er_db_on_axis(0.0, 0.0, 0.0, [1.1, -0.1, np.nan])).all()
    assert np.isnan(er_db_from_ellipticity(1.0)) and np.isnan(ellipticity_rad_from_er_db(-3.0))
