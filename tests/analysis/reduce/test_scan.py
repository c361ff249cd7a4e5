"""Rotating plate and rotating analyser."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import minimize

from analysis.fibre.mueller import mueller_polarizer, mueller_retarder
from analysis.reduce.scan import (
    analyser_matrix,
    plate_matrix,
    plate_offset_rad,
    stokes_of_analyser_scan,
    stokes_of_plate_scan,
    stokes_seen_with_wrong_retardance,
)
from tests.reference.values import close, reference
from tests.strategies import unit_sops

QUARTER = np.pi / 2
EIGHT_RAD = np.radians(np.arange(8) * 22.5)


def inputs(name, angle="theta_deg"):
    row = reference(name)
    return row, np.radians(row["inputs"][angle])


def test_intensity_law():
    """T03-int-01: Schaefer, Collett et al., Am. J. Phys. 75, 163 (2007), fast axis; by closed form and Jones."""
    row, plate = inputs("T03-int-01")
    np.testing.assert_allclose(plate_matrix(plate, QUARTER) @ row["inputs"]["S"], row["expected"], **close(row))
    row, plate = inputs("T03-gen-int", "reading_deg")
    retardance, offset = np.radians([row["inputs"]["delta_deg"], row["inputs"]["offset_deg"]])
    np.testing.assert_allclose(plate_matrix(plate, retardance, offset) @ row["inputs"]["S"], row["expected"], **close(row))


@given(unit_sops(), st.floats(-3, 3), st.floats(0.1, 3.0))
def test_law_is_plate_then_analyser(sop, azimuth, retardance):
    """The Mueller chain says the same."""
    stokes = np.array([1.0, *sop])
    behind = mueller_polarizer(0.0) @ mueller_retarder(retardance, azimuth) @ stokes
    np.testing.assert_allclose(plate_matrix([azimuth], retardance) @ stokes, [behind[0]], atol=1e-12)


def test_law_against_py_pol():
    """py_pol 1.3: its plate and its polarizer on the light of the reference file, plate of 100 deg at twelve azimuths."""
    library = pytest.importorskip("py_pol.mueller")
    plate, stokes = np.radians(np.arange(12) * 15.0), np.array([1.0, 0.6, 0.48, 0.64])
    plates = library.Mueller().retarder_linear(R=np.radians(100.0), azimuth=plate)
    analyser = library.Mueller().diattenuator_perfect()
    seen = [(np.asarray(analyser.M)[:, :, 0] @ np.asarray(plates.M)[:, :, k] @ stokes)[0] for k in range(12)]
    np.testing.assert_allclose(plate_matrix(plate, np.radians(100.0)) @ stokes, np.real(seen), atol=1e-9)


def test_stokes_of_a_quarter_wave_scan():
    row, plate = inputs("T03-stokes-01")
    found = stokes_of_plate_scan(plate, row["inputs"]["I"], retardance_rad=QUARTER)
    np.testing.assert_allclose(found.stokes, row["expected"], **close(row))
    assert found.spare == 4


def test_stokes_of_any_plate():
    row, plate = inputs("T03-gen-stokes", "reading_deg")
    retardance, offset = np.radians([row["inputs"]["delta_deg"], row["inputs"]["offset_deg"]])
    found = stokes_of_plate_scan(plate, row["inputs"]["I"], retardance_rad=retardance, offset_rad=offset)
    np.testing.assert_allclose(found.stokes, row["expected"], **close(row))


def test_offset_from_the_second_harmonic():
    row, plate = inputs("T03-gen-offset", "reading_deg")
    np.testing.assert_allclose(np.degrees(plate_offset_rad(plate, row["inputs"]["I"])), row["expected"], **close(row))
    assert np.isnan(plate_offset_rad(EIGHT_RAD, plate_matrix(EIGHT_RAD, QUARTER) @ [1, 1, 0, 0]))


def test_wrong_retardance_shows_a_dop_above_one():
    """T03-bias-01: 95 deg taken for 90 deg makes DOP 1.19; by the closed form and by reducing such a scan."""
    row = reference("T03-bias-01")
    retardance = np.radians(row["inputs"]["delta_deg"])
    intensity = plate_matrix(EIGHT_RAD, retardance) @ row["inputs"]["S"]
    seen = stokes_of_plate_scan(EIGHT_RAD, intensity, retardance_rad=QUARTER).stokes
    np.testing.assert_allclose(seen, stokes_seen_with_wrong_retardance(row["inputs"]["S"], retardance), atol=1e-12)
    found = [seen[0], seen[1], np.linalg.norm(seen[1:]) / seen[0]]
    np.testing.assert_allclose(found, [row["expected"][name] for name in ("S0", "S1", "DOP")], **close(row))


def test_steps_of_45_degrees_are_refused():
    """T03-alias: sin 4 theta vanishes at all of them."""
    row, plate = inputs("T03-alias")
    np.testing.assert_allclose(np.sin(4 * plate), row["expected"], **close(row))
    with pytest.raises(ValueError, match="cannot tell S2"):
        stokes_of_plate_scan(plate, np.ones(8), retardance_rad=QUARTER)


@pytest.mark.parametrize(("retardance_deg", "part"), [(180.0, "S3"), (0.0, "S")])
def test_plates_that_turn_nothing_are_refused(retardance_deg, part):
    with pytest.raises(ValueError, match=f"cannot tell {part}"):
        stokes_of_plate_scan(EIGHT_RAD, np.ones(8), retardance_rad=np.radians(retardance_deg))


def test_condition_number_of_a_quarter_wave_plate():
    row = reference("T03-cond-90")
    found = stokes_of_plate_scan(EIGHT_RAD, np.ones(8), retardance_rad=QUARTER)
    np.testing.assert_allclose(found.condition, row["expected"], **close(row))


def test_best_retardance_of_a_uniformly_turned_plate():
    """T03-cond-opt: 128.05 deg, 1.843."""
    row = reference("T03-cond-opt")
    sixteen = np.radians(np.arange(16) * 11.25)

    def condition(retardance_deg):
        return stokes_of_plate_scan(sixteen, np.ones(16), retardance_rad=np.radians(retardance_deg[0])).condition

    best = minimize(condition, [120.0], method="Nelder-Mead", options={"xatol": 1e-4, "fatol": 1e-8})
    np.testing.assert_allclose([best.x[0], best.fun], [row["expected"]["delta_deg"], row["expected"]["cond"]], atol=0.02)


def test_best_four_angles_are_those_of_the_paper():
    """Sabatke et al., Opt. Lett. 25, 802 (2000), abstract read: 132 deg with +-15.1 and +-51.7 deg is optimal."""

    def condition(x):
        try:
            plate = np.radians([-x[2], -x[1], x[1], x[2]])
            return stokes_of_plate_scan(plate, np.ones(4), retardance_rad=np.radians(x[0])).condition
        except ValueError:
            return 100.0

    options = {"xatol": 1e-5, "fatol": 1e-10, "maxiter": 4000}
    best = minimize(condition, [125.0, 20.0, 45.0], method="Nelder-Mead", options=options)
    np.testing.assert_allclose(best.x, [132.0, 15.1, 51.7], atol=0.5)
    np.testing.assert_allclose(best.fun, np.sqrt(3.0), rtol=1e-3)


def test_rotating_analyser():
    """T03-malus-fit."""
    row, analyser = inputs("T03-malus-fit", "alpha_deg")
    np.testing.assert_allclose(stokes_of_analyser_scan(analyser, row["inputs"]["I"]).stokes, row["expected"], **close(row))
    with pytest.raises(ValueError, match="cannot tell S2"):
        stokes_of_analyser_scan(np.radians([0, 90, 180, 270]), np.ones(4))


@given(unit_sops(), st.floats(0.3, 1.0), st.floats(0.6, 2.6), st.floats(-0.5, 0.5))
def test_any_light_is_found_again_from_odd_angles(sop, dop, retardance, offset):
    stokes = np.array([2.0, *(2.0 * dop * sop)])
    plate = np.array([-1.3, -0.8, -0.35, 0.1, 0.44, 0.9, 1.5])
    intensity = plate_matrix(plate, retardance, offset) @ stokes
    found = stokes_of_plate_scan(plate, intensity, retardance_rad=retardance, offset_rad=offset)
    np.testing.assert_allclose(found.stokes, stokes, atol=1e-9)


@pytest.mark.parametrize("given_sigma", [True, False])
def test_covariance_is_the_scatter(given_sigma):
    """200,000 noisy scans at once, unequal noise where it is told: scatter, chi square and the stated covariance agree."""
    random = np.random.default_rng(15)
    stokes = np.array([1.0, 0.6, 0.48, 0.5])
    sigma = np.linspace(0.005, 0.02, 8) if given_sigma else np.full(8, 0.01)
    noisy = plate_matrix(EIGHT_RAD, 2.2) @ stokes + sigma * random.standard_normal((200_000, 8))
    found = stokes_of_plate_scan(EIGHT_RAD, noisy, retardance_rad=2.2, sigma=sigma if given_sigma else None)
    scatter, stated = np.cov(found.stokes.T), found.covariance.mean(axis=0)
    np.testing.assert_allclose(stated, scatter, atol=0.02 * np.trace(scatter) / 4)
    expected = 4.0 if given_sigma else 4.0 * 0.01**2
    np.testing.assert_allclose(found.chi_square.mean(), expected, rtol=0.03)


def test_four_readings_without_sigma_have_no_covariance():
    plate = np.radians([-51.7, -15.1, 15.1, 51.7])
    found = stokes_of_plate_scan(plate, np.ones(4), retardance_rad=np.radians(132))
    assert np.isnan(found.covariance).all() and found.spare == 0
    lost = stokes_of_plate_scan(EIGHT_RAD, [[np.nan] + [1.0] * 7, [1.0] * 8], retardance_rad=QUARTER)
    assert np.isnan(lost.stokes[0]).all() and np.isfinite(lost.stokes[1]).all()


@pytest.mark.parametrize(("call", "word"), [
    (lambda: stokes_of_plate_scan(EIGHT_RAD[:3], np.ones(3), retardance_rad=1.5), "3 readings cannot give 4"),
    (lambda: stokes_of_plate_scan(EIGHT_RAD, np.ones(7), retardance_rad=1.5), "last axis"),
    (lambda: stokes_of_plate_scan(EIGHT_RAD, np.ones(8), retardance_rad=1.5, sigma=0.0), "sigma"),
])  # fmt: skip
def test_impossible_scans_are_refused(call, word):
    with pytest.raises(ValueError, match=word):
        call()


def test_analyser_sees_no_handedness():
    assert analyser_matrix([0.1, 0.2]).shape == (2, 3)
