"""Circle of a PM fibre's output on the sphere."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from analysis.drift.arc import ArcVerdict
from analysis.drift.arc_sphere import fit_sphere_arc, plane_circle, refined_circle
from analysis.quantities import angle_between_rad, sop_from_angles
from tests.analysis.drift.fibre_course import circle
from tests.reference.generator import uniforms
from tests.reference.values import close, reference

MINUTE_US = 60_000_000


def course(seed, half_arc_rad, noise_deg=0.1, count=1440, ends_deg=(1.5, 1.5)):
    """Times, states and true worst ER: a cord with these ends, its phase swinging over the arc, noise in each component."""
    random = np.random.default_rng(seed)
    phase = random.uniform(0, 2 * np.pi) + half_arc_rad * np.sin(np.linspace(0, 60 * np.pi, count))
    axis = [math.cos(math.radians(2 * ends_deg[1])), math.sin(math.radians(2 * ends_deg[1])), 0.0]
    sop = circle(axis, math.radians(2 * ends_deg[0]), phase) + math.radians(noise_deg) * random.normal(size=(count, 3))
    return np.arange(count) * MINUTE_US, sop, -20 * math.log10(math.tan(math.radians(sum(ends_deg))))


def fits(half_arc_rad, noise_deg=0.1, seeds=40):
    found = []
    for seed in range(seeds):
        at_us, sop, true_db = course(seed, half_arc_rad, noise_deg)
        found.append((fit_sphere_arc(at_us, sop, np.array([1.0, 0.0, 0.0])), true_db))
    return found


@pytest.mark.parametrize("name", ["T09-fit-noisy-full", "T09-fit-noisy-arc60"])
def test_plane_and_refined_radius(name):
    row = reference(name)
    x, count = row["inputs"], len(row["inputs"]["phases_deg"])
    axis = sop_from_angles(*np.radians(x["axis_psi_chi_deg"]))
    sop = circle(axis, math.radians(x["radius_deg"]), np.radians(x["phases_deg"]))
    sop += 0.004 * (2 * uniforms(3 * count).reshape(count, 3) - 1)
    sop /= np.linalg.norm(sop, axis=1, keepdims=True)
    plane, radius = plane_circle(sop)
    np.testing.assert_allclose(math.degrees(radius), row["expected"]["plane_radius_deg"], **close(row))
    _, radius = refined_circle(sop, np.ones(count), plane, radius)
    np.testing.assert_allclose(math.degrees(radius), row["expected"]["geodesic_radius_deg"], **close(row))


@pytest.mark.parametrize("half_arc_rad", [0.7, 1.0, 2.0, 4.0])
def test_worst_er_with_a_band_that_covers_it(half_arc_rad):
    found = fits(half_arc_rad)
    assert all(arc.verdict is ArcVerdict.MEASURED for arc, _ in found)
    assert np.mean([abs(arc.worst.er_db - true) < 0.5 for arc, true in found]) >= 0.95
    assert np.mean([arc.worst.low_db <= true <= arc.worst.high_db for arc, true in found]) >= 0.85


def test_short_arcs_and_points_are_not_measured():
    assert all(arc.verdict is ArcVerdict.TOO_SHORT for arc, _ in fits(0.3))
    assert all(arc.verdict is ArcVerdict.NO_ARC for arc, _ in fits(0.001))


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 2**32 - 1), st.floats(0.05, 1.5), st.floats(0.0, 3.0))
def test_turning_the_sphere_changes_nothing_but_the_axis(seed, radius, tilt):
    random = np.random.default_rng(seed)
    turn = Rotation.random(random_state=np.random.default_rng(seed)).as_matrix()
    axis, wanted = np.array([0.6, 0.8, 0.0]), np.array([0.0, 0.0, 1.0])
    sop = circle(axis, radius, random.uniform(0, 2 * np.pi, 200)) + 1e-4 * random.normal(size=(200, 3))
    at_us = np.arange(200) * MINUTE_US
    one, other = fit_sphere_arc(at_us, sop, wanted), fit_sphere_arc(at_us, sop @ turn.T, turn @ wanted)
    assert other.radius_rad == pytest.approx(one.radius_rad, abs=1e-9)
    assert other.worst.er_db == pytest.approx(one.worst.er_db, abs=1e-6)
    np.testing.assert_allclose(other.axis, turn @ one.axis, atol=1e-8)


@given(st.floats(0.05, 1.5))
@settings(max_examples=25, deadline=None)
def test_a_pure_circle_gives_its_own_radius_axis_and_extremes(radius):
    axis = np.array([0.36, 0.48, 0.8])
    arc = fit_sphere_arc(np.arange(100) * MINUTE_US, 3.7 * circle(axis, radius, np.linspace(0, 6.2, 100)), axis)
    assert arc.radius_rad == pytest.approx(radius, abs=1e-9) and arc.tilt_rad == pytest.approx(0.0, abs=1e-8)
    assert arc.worst.er_db == pytest.approx(-20 * math.log10(math.tan(radius / 2)), abs=1e-6)
    assert arc.half_arc_rad == pytest.approx(math.pi, rel=0.05)


def test_many_readings_summed_by_phase_give_the_same_circle():
    at_us, sop, _ = course(3, 1.2, count=20_000)
    arc = fit_sphere_arc(at_us, sop, np.array([1.0, 0.0, 0.0]))
    unit = sop / np.linalg.norm(sop, axis=1, keepdims=True)
    axis, radius = refined_circle(unit, np.ones(len(sop)), *plane_circle(unit))
    assert arc.radius_rad == pytest.approx(radius, rel=2e-3)
    assert float(angle_between_rad(arc.axis, axis)) < 2e-4


def test_nan_rows_are_left_out_and_few_rows_say_nothing():
    at_us, sop, _ = course(4, 2.0)
    holed = sop.copy()
    holed[::7] = np.nan
    keep = np.arange(len(sop)) % 7 != 0
    wanted = np.array([1.0, 0.0, 0.0])
    found, expected = fit_sphere_arc(at_us, holed, wanted), fit_sphere_arc(at_us[keep], sop[keep], wanted)
    assert found.worst == expected.worst and found.readings == keep.sum()
    assert fit_sphere_arc(at_us[:7], sop[:7], wanted).verdict is ArcVerdict.NO_ARC
    with pytest.raises(ValueError, match="pass \\(N, 3\\)"):
        fit_sphere_arc(at_us, sop[:, :2], wanted)


def test_slow_wander_across_the_circle_widens_the_band():
    at_us, sop, _ = course(5, 2.0, noise_deg=0.0)
    random = np.random.default_rng(0)
    wanted = np.array([1.0, 0.0, 0.0])
    white = fit_sphere_arc(at_us, sop + 0.002 * random.normal(size=sop.shape), wanted)
    slow = fit_sphere_arc(at_us, sop + 0.002 * np.repeat(random.normal(size=(48, 3)), 30, axis=0), wanted)
    assert slow.worst.high_db - slow.worst.low_db > 2 * (white.worst.high_db - white.worst.low_db)
