"""Stokes readings: state, degree of polarization, angle and extinction ratio on the wanted axis."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.judge.rule import Quantity
from analysis.quantities import angle_rad_from_er_db, sop_from_angles
from analysis.reduce.calibration import TapCalibration
from analysis.reduce.stokes import SAMPLES_AT_ONCE, dop_and_sop
from analysis.reduce.tap import TrustContext, reduce_tap
from analysis.reduce.trust import QUANTITIES, Reason, Trust
from tests.reference.values import close, reference, references
from tests.strategies import unit_sops

ER, ANGLE, DOP, POWER = Quantity.ER_DB, Quantity.ANGLE_DEG, Quantity.DOP, Quantity.POWER_W
H = [1.0, 0.0, 0.0]


def stokes(rows, unit="W", context=None, extra=None, **fields):
    rows = np.atleast_2d(np.asarray(rows, float))
    columns = {f"s{k}": rows[:, k] for k in range(4)} | (extra or {})
    return reduce_tap("stokes", unit, np.zeros(len(rows), np.int64), columns, TapCalibration(**fields), trust_context=context)


def angles(azimuth_deg, ellipticity_deg, dop=None, power=None, unit="W", **fields):
    columns = {
        "azimuth_deg": np.atleast_1d(np.asarray(azimuth_deg, float)),
        "ellipticity_deg": np.atleast_1d(np.asarray(ellipticity_deg, float)),
    }
    columns |= {
        name: np.atleast_1d(np.asarray(value, float)) for name, value in (("dop", dop), ("power", power)) if value is not None
    }
    return reduce_tap("stokes", unit, np.zeros(len(columns["azimuth_deg"]), np.int64), columns, TapCalibration(**fields))


def test_job_example():
    """Job paper: (1, 0.9, 0.3, -0.2) -> DOP 0.9695, azimuth 9.22 deg, ellipticity -5.95 deg, ER on S1 12.79 dB."""
    found = stokes([1, 0.9, 0.3, -0.2], wanted_state=H)
    np.testing.assert_allclose(found.dop, 0.9695, atol=5e-5)
    np.testing.assert_allclose(np.degrees([found.azimuth_rad[0], found.ellipticity_rad[0]]), [9.22, -5.95], atol=5e-3)
    np.testing.assert_allclose(found.er_db, 12.79, atol=5e-3)
    np.testing.assert_allclose([found.wanted_power[0], found.other_power[0]], [0.95, 0.05])


def test_ellipticity_is_of_the_vector_not_of_s0():
    """T02-angles-02: asin(S3/S0) would give -7.24 deg, plain atan(S2/S1) -26.57 deg; both are wrong."""
    row = reference("T02-angles-02")
    found = stokes(row["inputs"]["S"])
    seen = {"psi_deg": math.degrees(found.azimuth_rad[0]), "chi_deg": math.degrees(found.ellipticity_rad[0]), "DOP": found.dop[0]}
    for name, value in seen.items():
        np.testing.assert_allclose(value, row["expected"][name], **close(row))


@pytest.mark.parametrize("row", references("T01-gen"), ids=lambda row: row["id"])
def test_er_through_an_analyser(row):
    """ER = 10 log10[(1 + p cos2chi cos2(psi - psi0)) / (1 - same)]: all light on the wanted axis."""
    x = row["inputs"]
    axis = sop_from_angles(math.radians(x["psi0_deg"]), 0.0)
    found = angles(x["psi_deg"], x["chi_deg"], dop=x["DOP"], wanted_state=axis)
    np.testing.assert_allclose(found.er_db, row["expected"], **close(row))


@pytest.mark.parametrize("row", references("T01-ell"), ids=lambda row: row["id"])
def test_ellipse_on_the_analyser_axis(row):
    """Axis ratio tan chi: ER = -20 log10 tan chi."""
    found = angles(0.0, row["inputs"]["chi_deg"], dop=1.0, wanted_state=H)
    np.testing.assert_allclose(found.er_db, row["expected"], **close(row))


def test_dop_limits_the_port_er_but_not_the_polarized_part():
    """methods: DOP 0.98 caps the port ER at 19.96 dB, 10 log10((1 + p)/(1 - p))."""
    found = angles([0.0, 2.0], [0.0, 0.0], dop=[0.98, 0.98], wanted_state=H)
    np.testing.assert_allclose(found.er_db[0], 19.956, atol=1e-3)
    np.testing.assert_allclose(found.polarized_er_db[1], -20 * np.log10(np.tan(np.radians(2.0))), rtol=1e-9)
    assert found.er_db[1] < found.er_db[0] < found.polarized_er_db[1]


def test_against_another_optics_library():
    """py_pol (Martinez-Vazquez, Sanchez-Brea, Moreno: open library of polarization optics), same sign of S3."""
    py_pol = pytest.importorskip("py_pol.stokes")
    rng = np.random.default_rng(5)
    azimuth, ellipticity = rng.uniform(0, np.pi, 50), rng.uniform(-np.pi / 4, np.pi / 4, 50)
    dop = rng.uniform(0.2, 1.0, 50)
    light = py_pol.Stokes("light")
    light.general_azimuth_ellipticity(azimuth=azimuth, ellipticity=ellipticity, intensity=2.0, degree_pol=dop)
    rows = np.asarray(light.M, float).reshape(4, -1).T
    found = stokes(rows)
    np.testing.assert_allclose(np.mod(found.azimuth_rad, np.pi), azimuth, atol=1e-9)
    np.testing.assert_allclose(found.ellipticity_rad, ellipticity, atol=1e-9)
    np.testing.assert_allclose(found.dop, dop, rtol=1e-9)


@pytest.mark.parametrize("s3", [1.0, -1.0])
def test_azimuth_does_not_exist_at_the_poles(s3):
    """T02-poles: report no azimuth, not 0; the angle to the wanted state is still known."""
    assert reference("T02-poles")["expected"].startswith("undefined")
    found = stokes([1, 0, 0, s3], wanted_state=H)
    assert np.isnan(found.azimuth_rad[0])
    np.testing.assert_allclose(np.degrees([found.ellipticity_rad[0], found.angle_rad[0]]), [math.copysign(45.0, s3), 90.0])
    assert found.trust[ANGLE][0] == Trust.TRUSTED


def test_pole_sent_as_angles_without_azimuth():
    found = angles(np.nan, 45.0, dop=1.0, wanted_state=[0, 0, 1])
    np.testing.assert_allclose(found.angle_rad, 0.0, atol=1e-9)


def test_handedness_ieee_turns_s3_and_nothing_else():
    """IEEE Std 149 names the sense the other way: +10 deg and -10 deg of ellipticity are 40 deg apart on the sphere."""
    state = sop_from_angles(0.0, math.radians(10.0))
    optics = angles(0.0, 10.0, dop=1.0, wanted_state=state)
    ieee = angles(0.0, 10.0, dop=1.0, wanted_state=state, handedness="ieee")
    np.testing.assert_allclose(np.degrees([optics.angle_rad[0], ieee.angle_rad[0]]), [0.0, 40.0], atol=1e-6)
    np.testing.assert_allclose(np.degrees(ieee.ellipticity_rad), -10.0)
    rows = [[1, 0.5, 0.3, 0.6]] * 2
    mixed = stokes(rows, handedness=np.array(["ieee", "optics"]))
    np.testing.assert_allclose(mixed.sop[0] * [1, 1, -1], mixed.sop[1])


def test_dop_above_one_is_doubtful_never_refused():
    """Two deployed links (published statistics): over 25 % of their rows have DOP above 100 %."""
    found = stokes([1.0, 1.02, 0.0, 0.3], wanted_state=[0, 1, 0])
    assert found.dop[0] > 1 and np.isfinite(found.er_db[0])
    assert found.trust[DOP][0] == found.trust[ER][0] == found.trust[ANGLE][0] == Trust.DOUBTFUL
    assert found.trust[POWER][0] == Trust.TRUSTED and found.reasons[DOP][0] == Reason.DOP_ABOVE_ONE


def test_rounding_does_not_make_a_dop_doubtful():
    sop = np.float32([0.6, 0.64, 0.48])
    assert stokes([1.0, *sop]).trust[DOP][0] == Trust.TRUSTED


def test_negative_cross_port_has_no_port_er():
    """S0 - S1 <= 0: the port ER is not defined, the angle is."""
    found = stokes([1.0, 1.1, 0.05, 0.0], wanted_state=H)
    assert np.isnan(found.er_db[0]) and found.reasons[ER][0] & Reason.NEGATIVE and found.trust[ER][0] == Trust.UNTRUSTED
    assert np.isfinite(found.angle_rad[0]) and found.trust[ANGLE][0] == Trust.DOUBTFUL
    assert np.isfinite(found.polarized_er_db[0])


def test_no_light_has_no_dop():
    found = stokes([[-0.001, 0.001, 0.0, 0.0], [0.0, 0.0, 0.0, 0.0]], wanted_state=H)
    assert np.isnan(found.dop).all() and (found.trust[DOP] == Trust.UNTRUSTED).all()
    assert found.trust[POWER].tolist() == [Trust.TRUSTED, Trust.TRUSTED]


def test_without_a_wanted_state_er_and_angle_say_why():
    found = stokes([1, 0.9, 0.3, -0.2])
    assert np.isnan(found.er_db[0]) and np.isnan(found.angle_rad[0])
    assert found.trust[ER][0] == found.trust[ANGLE][0] == Trust.NONE
    assert Reason(int(found.reasons[ER][0])).words == "No wanted state set"
    assert found.trust[DOP][0] == Trust.TRUSTED


def test_some_taps_without_a_wanted_state():
    states = np.array([[1.0, 0.0, 0.0], [np.nan] * 3])
    found = stokes([[1, 0.9, 0.3, -0.2]] * 2, wanted_state=states)
    assert found.trust[ER].tolist() == [Trust.TRUSTED, Trust.NONE]
    np.testing.assert_allclose(found.er_db, [12.7875, np.nan], atol=1e-4)


def test_unpolarized_light_has_er_zero_and_no_angle():
    found = stokes([1.0, 0.0, 0.0, 0.0], wanted_state=H)
    assert found.er_db[0] == 0.0 and np.isnan(found.angle_rad[0]) and found.trust[ANGLE][0] == Trust.UNTRUSTED


def test_angles_without_dop_leave_er_open():
    found = angles(10.0, 0.0, power=1e-3, wanted_state=H)
    assert np.isnan(found.er_db[0]) and found.trust[ER][0] == found.trust[DOP][0] == Trust.NONE
    assert found.reasons[ER][0] & Reason.NO_DOP
    np.testing.assert_allclose(np.degrees(found.angle_rad), 20.0)
    assert found.power_w[0] == 1e-3 and found.trust[ANGLE][0] == Trust.TRUSTED


def test_frozen_polarimeter_is_untrusted_in_all():
    found = stokes([1, 0.9, 0.3, -0.2], wanted_state=H, context=TrustContext(is_flat=np.array([[True]])))
    assert all(found.trust[quantity][0] == Trust.UNTRUSTED for quantity in QUANTITIES)


def test_lost_and_saturated_readings():
    found = stokes([[1, np.nan, 0, 0], [2, 1, 0, 0]], wanted_state=H, saturation1=2.0)
    assert (found.trust[ER] == Trust.UNTRUSTED).all()
    assert found.reasons[DOP].tolist() == [Reason.IMPOSSIBLE, Reason.SATURATED]


def test_floor_bounds_the_er_of_a_clean_state():
    """The calibration's floors are 1 sigma of the two port powers; a cross port of 0 under 1 nW noise is a bound."""
    found = stokes([1e-3, 1e-3, 0, 0], wanted_state=H, floor1=1e-9, floor2=1e-9)
    assert found.is_lower_bound[0]
    np.testing.assert_allclose(found.er_db, 57.08, atol=0.01)


@given(unit_sops(), st.floats(0.05, 1.0), st.floats(1e-6, 1e-2))
def test_angles_and_stokes_say_the_same(sop, dop, power):
    one = stokes([power, *(power * dop * sop)], wanted_state=[0.6, 0.0, 0.8])
    other = angles(
        np.degrees(one.azimuth_rad), np.degrees(one.ellipticity_rad), dop=one.dop, power=power, wanted_state=[0.6, 0.0, 0.8]
    )
    np.testing.assert_allclose(other.sop, one.sop, atol=1e-7)
    np.testing.assert_allclose(other.angle_rad, one.angle_rad, atol=1e-6)
    np.testing.assert_allclose(other.power_w, one.power_w)


@given(unit_sops(), unit_sops())
def test_pure_light_has_the_same_angle_from_er_and_from_the_sphere(sop, state):
    """For DOP 1 the contract's two angles agree: 2 atan(10^(-ER/20)) and the great circle."""
    found = stokes([1.0, *sop], wanted_state=state)
    if np.isfinite(found.er_db[0]) and 1e-3 < found.angle_rad[0] < np.pi - 1e-3:
        np.testing.assert_allclose(angle_rad_from_er_db(found.er_db), found.angle_rad, atol=1e-5)


@given(unit_sops(), unit_sops(), st.floats(0.0, 2 * np.pi), st.floats(0.1, 0.99))
def test_a_turn_of_the_whole_sphere_changes_no_er(sop, state, turn_rad, dop):
    """ER, angle and DOP do not depend on where the polarimeter puts its axes (turn about S3)."""
    turn = np.array([[np.cos(turn_rad), -np.sin(turn_rad), 0], [np.sin(turn_rad), np.cos(turn_rad), 0], [0, 0, 1]])
    one = stokes([1.0, *(dop * sop)], wanted_state=state)
    other = stokes([1.0, *(dop * turn @ sop)], wanted_state=turn @ state)
    np.testing.assert_allclose(other.dop, one.dop, rtol=1e-12)
    np.testing.assert_allclose(other.angle_rad, one.angle_rad, atol=1e-7)
    np.testing.assert_allclose(other.er_db, one.er_db, atol=1e-6)


def test_long_records_are_reduced_in_runs_as_short_ones():
    """Cutting into runs changes nothing, also with per-sample calibration, a lost reading and light below zero."""
    random = np.random.default_rng(22)
    count = 2 * SAMPLES_AT_ONCE + 17
    rows = np.column_stack([np.ones(count), 0.5 * random.standard_normal((count, 3))])
    rows[[3, SAMPLES_AT_ONCE + 5]] = [[np.nan, 0, 0, 0], [-1, 0.1, 0, 0]]
    states = random.standard_normal((count, 3))
    hands = np.where(np.arange(count) % 2 == 0, "ieee", "optics")
    whole = stokes(rows, wanted_state=states, handedness=hands, floor1=np.full(count, 1e-3), floor2=1e-3)
    for part in (slice(0, 40), slice(SAMPLES_AT_ONCE - 20, SAMPLES_AT_ONCE + 20), slice(count - 40, count)):
        alone = stokes(rows[part], wanted_state=states[part], handedness=hands[part], floor1=1e-3, floor2=1e-3)
        for name in ("er_db", "angle_rad", "dop", "sop", "power_w", "er_sigma_db", "is_lower_bound", "azimuth_rad"):
            np.testing.assert_array_equal(getattr(whole, name)[part], getattr(alone, name))
        for quantity in QUANTITIES:
            np.testing.assert_array_equal(whole.reasons[quantity][part], alone.reasons[quantity])


def test_one_wanted_state_as_array_is_not_cut():
    rows = np.tile([1.0, 0.9, 0.3, -0.2], (SAMPLES_AT_ONCE + 2, 1))
    np.testing.assert_allclose(stokes(rows, wanted_state=np.array(H)).er_db, 12.7875, atol=1e-4)


def test_dop_and_states_alone_agree_with_the_full_reduction():
    random = np.random.default_rng(23)
    rows = np.column_stack([np.ones(SAMPLES_AT_ONCE + 9), random.standard_normal((SAMPLES_AT_ONCE + 9, 3))])
    rows[[1, 2, 3]] = [[0, 1, 0, 0], [1, 0, 0, 0], [1, np.nan, 0, 0]]
    dop, sop = dop_and_sop(*rows.T)
    full = stokes(rows)
    np.testing.assert_allclose(dop, full.dop, rtol=1e-14)
    np.testing.assert_allclose(sop, full.sop, rtol=1e-14)
    assert np.isnan(dop[[1, 3]]).all() and dop[2] == 0.0 and np.isnan(sop[2:4]).all()
