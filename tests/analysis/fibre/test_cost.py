"""What a polarization error costs, and the limits that wanted qualities set."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.fibre.cost import (
    fringe_visibility,
    limit_from_fringe_visibility,
    limit_from_orthogonal_share,
    limit_from_projective_contrast,
    limit_from_qber,
    limit_from_residual_amplitude_modulation,
    limit_from_unmodulated_share,
    orthogonal_share,
    polarization_qber,
    projective_contrast,
    residual_amplitude_modulation,
    unmodulated_share,
)
from analysis.fibre.jones import jones_state
from analysis.quantities import angle_between_rad, angle_rad_from_er_db, sop_from_angles
from tests.reference.values import close, reference, references


@pytest.mark.parametrize("row", references("T02-links"), ids=lambda row: row["id"])
def test_four_figures_of_one_angle(row):
    """Projection on the sphere (mpmath); the two 'visibilities' are different things."""
    angle = np.radians(row["inputs"]["angle_deg"])
    found = {"orthogonal_fraction": orthogonal_share(angle), "two_beam_fringe_visibility": fringe_visibility(angle),
             "projective_contrast": projective_contrast(angle), "polarization_error_rate": polarization_qber(angle)}  # fmt: skip
    for name, value in found.items():
        np.testing.assert_allclose(value, row["expected"][name], **close(row))


@pytest.mark.parametrize("row", references("T02-qber"), ids=lambda row: row["id"])
def test_error_rate_of_an_er(row):
    found = polarization_qber(angle_rad_from_er_db(row["inputs"]["ER_dB"]))
    np.testing.assert_allclose(found, row["expected"], **close(row))
    np.testing.assert_allclose(limit_from_qber(row["expected"]).er_db, row["inputs"]["ER_dB"], atol=1e-8)


def test_overlap_of_two_fields():
    """T02-gc-sop; the orthogonal share is also 1 - |<e1|e2>|^2 of Jones vectors."""
    one, other = np.radians([20, 10]), np.radians([32, -4])
    angle = angle_between_rad(sop_from_angles(*one), sop_from_angles(*other))
    np.testing.assert_allclose(orthogonal_share(angle), reference("T02-gc-sop")["expected"]["orthogonal_fraction"], rtol=1e-9)
    overlap = np.abs(np.vdot(jones_state(*one), jones_state(*other))) ** 2
    np.testing.assert_allclose(orthogonal_share(angle), 1 - overlap, rtol=1e-9)


@pytest.mark.parametrize(("qber", "er_db"), [(0.01, 20.0), (0.02, 17.0), (0.048, 13.0), (0.11, 9.1)])
def test_error_rates_of_the_job_paper(qber, er_db):
    """11 % is the threshold of BB84 with one-way processing (Shor and Preskill, PRL 85, 441 (2000), from memory)."""
    np.testing.assert_allclose(limit_from_qber(qber).er_db, er_db, atol=0.1)


@pytest.mark.parametrize(("visibility", "angle_deg"), [(0.99, 16.2), (0.95, 36.4), (0.90, 51.7)])
def test_visibilities_of_the_job_paper(visibility, angle_deg):
    np.testing.assert_allclose(limit_from_fringe_visibility(visibility).angle_deg, angle_deg, atol=0.05)


@pytest.mark.parametrize("ratio", [1.0, 0.25, 4.0, 9.0])
def test_fringes_of_two_fields(ratio):
    """Interference of two Jones fields, brightest and darkest phase; the inverse gives the angle back."""
    one, other = jones_state(0.2, 0.1), np.sqrt(ratio) * jones_state(0.7, -0.3)
    phases = np.exp(1j * np.linspace(0, 2 * np.pi, 100_001))
    power = np.sum(np.abs(one[:, None] + other[:, None] * phases) ** 2, axis=0)
    seen = (power.max() - power.min()) / (power.max() + power.min())
    angle = angle_between_rad(sop_from_angles(0.2, 0.1), sop_from_angles(0.7, -0.3))
    np.testing.assert_allclose(fringe_visibility(angle, ratio), seen, rtol=1e-6)
    np.testing.assert_allclose(limit_from_fringe_visibility(seen, ratio).angle_rad, angle, rtol=1e-5)


def test_unequal_arms_have_a_ceiling():
    np.testing.assert_allclose(fringe_visibility(0.0, 4.0), 0.8)
    with pytest.raises(ValueError, match=r"above the 0\.8 of arms so unequal"):
        limit_from_fringe_visibility(0.9, 4.0)


@pytest.mark.parametrize(("angle_deg", "off_deg", "depth", "phase"), [
    (8, 3, 0.7, 1.0), (40, 20, 1.5, np.pi / 2), (3, 45, 0.2, 2.5),
])  # fmt: skip
def test_residual_amplitude_modulation_of_fields(angle_deg, off_deg, depth, phase):
    """One period of the two phase-modulated fields behind the analyser, by Fourier transform; the formula's form is that of
    N. C. Wong and J. L. Hall, J. Opt. Soc. Am. B 2, 1527 (1985), from memory."""
    alpha, beta = np.radians([angle_deg / 2, off_deg])
    drive = np.sin(np.linspace(0, 2 * np.pi, 4096, endpoint=False))
    field = np.cos(alpha) * np.cos(beta) + np.sin(alpha) * np.sin(beta) * np.exp(1j * (phase + depth * drive))
    spectrum = np.fft.rfft(np.abs(field) ** 2) / 4096
    found = residual_amplitude_modulation(2 * alpha, beta, depth, phase)
    np.testing.assert_allclose(found, 2 * np.abs(spectrum[1]) / spectrum[0].real, rtol=1e-9)


@given(st.floats(1e-6, 0.3), st.floats(0.01, 1.5), st.floats(0.05, 1.8))
def test_limit_from_residual_amplitude_modulation_is_the_inverse(residual, off, depth):
    limit = limit_from_residual_amplitude_modulation(residual, off, depth)
    if limit.angle_rad < np.pi:
        np.testing.assert_allclose(residual_amplitude_modulation(limit.angle_rad, off, depth), residual, rtol=1e-6)
    below = np.linspace(0.0, limit.angle_rad, 50)[:-1]
    assert (residual_amplitude_modulation(below, off, depth) <= residual * (1 + 1e-9)).all()


@given(st.floats(1e-4, 3.1))
def test_inverses(angle):
    pairs = [(limit_from_orthogonal_share, orthogonal_share), (limit_from_qber, polarization_qber),
             (limit_from_fringe_visibility, fringe_visibility), (limit_from_projective_contrast, projective_contrast),
             (limit_from_unmodulated_share, unmodulated_share)]  # fmt: skip
    for inverse, forward in pairs:
        np.testing.assert_allclose(inverse(forward(angle)).angle_rad, angle, rtol=1e-5)


@given(st.floats(0.0, 3.1), st.floats(1e-3, 0.04))
def test_a_larger_error_always_costs_more(angle, more):
    assert orthogonal_share(angle + more) > orthogonal_share(angle)
    assert fringe_visibility(angle + more) < fringe_visibility(angle)


def test_limits_at_the_ends_and_shapes():
    assert limit_from_qber(0.0).er_db == np.inf and limit_from_fringe_visibility(1.0).angle_deg == 0.0
    assert limit_from_qber([0.01, 0.02]).er_db.shape == (2,) and np.isnan(limit_from_qber(np.nan).er_db)
    assert limit_from_residual_amplitude_modulation(1e-3, 0.0, 1.0).angle_rad == np.pi


@pytest.mark.parametrize(("call", "word"), [
    (lambda: limit_from_qber(1.5), "qber"), (lambda: limit_from_fringe_visibility(95.0), "visibility"),
    (lambda: fringe_visibility(0.1, 0.0), "power_ratio"),
    (lambda: limit_from_residual_amplitude_modulation(-1.0, 0.1, 1.0), "residual"),
])  # fmt: skip
def test_impossible_wishes_are_refused(call, word):
    with pytest.raises(ValueError, match=word):
        call()
