"""Conversions against definitions and values computed with 50 digits (tests/reference/SOURCES.md)."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis import quantities as q
from tests.reference.values import close, reference, references
from tests.strategies import er_values_db, unit_sops


@pytest.mark.parametrize("row", references("T01-dbm"), ids=lambda row: row["id"])
def test_level_of_a_power_in_dbm(row):
    np.testing.assert_allclose(q.dbm_from_watts(row["inputs"]["P_mW"] * 1e-3), row["expected"], **close(row))
    np.testing.assert_allclose(q.watts_from_dbm(row["expected"]), row["inputs"]["P_mW"] * 1e-3, rtol=1e-12)


@pytest.mark.parametrize("row", references("T02-er-sphere"), ids=lambda row: row["id"])
def test_angle_on_the_sphere_of_an_extinction_ratio(row):
    np.testing.assert_allclose(np.degrees(q.angle_rad_from_er_db(row["inputs"]["ER_dB"])), row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T01-ang-er"), ids=lambda row: row["id"])
def test_malus_misalignment_is_half_the_angle_on_the_sphere(row):
    """Linear light off the axis by theta: ER = -20 log10 tan theta, and theta is half of the angle on the sphere."""
    sphere_rad = 2.0 * math.radians(row["inputs"]["theta_deg"])
    np.testing.assert_allclose(q.er_db_from_angle_rad(sphere_rad), row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T02-qber"), ids=lambda row: row["id"])
def test_leak_gives_the_error_rate(row):
    """P_other / (P_wanted + P_other) = r / (1 + r)."""
    leak = q.leak_from_er_db(row["inputs"]["ER_dB"])
    np.testing.assert_allclose(leak / (1.0 + leak), row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T02-gc-"), ids=lambda row: row["id"])
def test_great_circle_angle_is_exact_at_both_ends(row):
    if "s1" in row["inputs"]:
        one, other, expected = np.array(row["inputs"]["s1"]), np.array(row["inputs"]["s2"]), row["expected"]
    else:
        one, other = (q.sop_from_angles(*np.radians(row["inputs"][f"psi{k},chi{k}"])) for k in "12")
        expected = math.radians(row["expected"]["angle_deg"])
    np.testing.assert_allclose(q.angle_between_rad(one, other), expected, rtol=1e-9)


@pytest.mark.parametrize("row", references("T02-fromangles"), ids=lambda row: row["id"])
def test_unit_vector_of_azimuth_and_ellipticity(row):
    angles = row["inputs"]
    sop = q.sop_from_angles(math.radians(angles["psi_deg"]), math.radians(angles["chi_deg"]))
    np.testing.assert_allclose(sop, row["expected"][1:], **close(row))


def test_two_azimuths_across_the_wrap_are_two_degrees_apart():
    """Azimuth has period 180 deg, the sphere twice the angle: +89.5 and -89.5 deg are 1 deg of azimuth, 2 deg apart."""
    one, other = q.sop_from_angles(np.radians([89.5, -89.5]), 0.0)
    np.testing.assert_allclose(np.degrees(q.angle_between_rad(one, other)), 2.0, rtol=1e-12)
    mean = one + other
    assert abs(math.degrees(0.5 * math.atan2(mean[1], mean[0]))) == pytest.approx(90.0, abs=1e-9)
    assert reference("T02-wrap")["expected"] == 90.0


def test_a_zero_vector_has_no_angle():
    assert np.isnan(q.angle_between_rad(np.zeros(3), np.array([1.0, 0.0, 0.0])))


@given(er_values_db)
def test_angle_and_extinction_ratio_are_inverse(er_db):
    angle_rad = q.angle_rad_from_er_db(er_db)
    assert 0.0 < angle_rad < np.pi
    np.testing.assert_allclose(q.er_db_from_angle_rad(angle_rad), er_db, rtol=0, atol=1e-9)


@given(er_values_db)
def test_exchanged_ports_mirror_the_angle(er_db):
    """ER changes its sign where the wanted and the other port change places: the angle becomes 180 deg minus it."""
    np.testing.assert_allclose(q.angle_rad_from_er_db(-er_db), np.pi - q.angle_rad_from_er_db(er_db), rtol=1e-12)


def test_ends_of_the_scale():
    np.testing.assert_allclose(q.angle_rad_from_er_db(np.array([np.inf, 0.0, -np.inf])), [0.0, np.pi / 2, np.pi])
    assert q.er_db_from_angle_rad(0.0) == np.inf
    assert np.isnan(q.er_db_from_leak(np.array([0.0, -1e-3]))).all()


@given(unit_sops(), unit_sops(), st.floats(0.1, 10.0))
def test_angle_is_symmetric_and_ignores_length(one, other, factor):
    angle_rad = q.angle_between_rad(one, other)
    np.testing.assert_allclose(q.angle_between_rad(factor * other, one), angle_rad, rtol=1e-9, atol=1e-12)


@given(unit_sops(), st.floats(1e-9, 1e-3))
def test_small_angles_keep_their_digits(sop, tilt_rad):
    """acos of the dot product would lose half of the digits here."""
    helper = np.array([0.0, 0.0, 1.0]) if abs(sop[2]) < 0.9 else np.array([1.0, 0.0, 0.0])
    across = np.cross(sop, helper)
    across /= np.linalg.norm(across)
    turned = np.cos(tilt_rad) * sop + np.sin(tilt_rad) * across
    np.testing.assert_allclose(q.angle_between_rad(sop, turned), tilt_rad, rtol=1e-6)


def test_units():
    assert [q.watts_per_unit(u) for u in ("W", "mW", "uW", "dBm")] == [1.0, 1e-3, 1e-6, 1.0]
    assert math.isnan(q.watts_per_unit("V")) and math.isnan(q.watts_per_unit("count"))
    np.testing.assert_allclose(q.linear_from_raw(np.array([0.0, -30.0]), "dBm"), [1e-3, 1e-6])
    with pytest.raises(ValueError, match="unit='nW' is unknown; use one of W, mW"):
        q.watts_per_unit("nW")
