"""Worst ER of a PM fibre from the natural swing of its leak with temperature."""

import numpy as np
import pytest
from scipy import optimize

from analysis.drift.arc import ArcVerdict
from analysis.drift.arc_leak import fit_leak_arc, noise_of
from tests.analysis.drift.fibre_course import leak_course


def fits(half_arc_rad, seeds=40, **course):
    found = []
    for seed in range(seeds):
        at_us, leak, temperature_k, true_db = leak_course(seed, half_arc_rad=half_arc_rad, **course)
        found.append((fit_leak_arc(at_us, leak, temperature_k), true_db))
    return found


def test_one_radian_over_a_day_tells_the_worst_within_1_db():
    """Acceptance of the job: ±1 rad over 24 h predicts a + b within 1 dB in most of many seeds, with a band that covers it."""
    found = [(arc, true) for arc, true in fits(1.0) if arc.verdict is ArcVerdict.MEASURED]
    assert len(found) >= 36
    assert np.mean([abs(arc.worst.er_db - true) < 1.0 for arc, true in found]) >= 0.95
    assert np.mean([arc.worst.low_db <= true <= arc.worst.high_db for arc, true in found]) >= 0.85


@pytest.mark.parametrize("noise_k", [0.01, 0.001])
def test_0_3_radians_are_too_short(noise_k):
    """At most one seed in forty may be fooled by its noise."""
    assert sum(arc.verdict is ArcVerdict.MEASURED for arc, _ in fits(0.3, noise_k=noise_k)) <= 1


@pytest.mark.parametrize("half_arc_rad", [2.5, 8.0, 19.0])
def test_longer_arcs_give_kappa_and_worst_with_honest_bands(half_arc_rad):
    found = fits(half_arc_rad, noise_k=0.001)
    assert np.mean([abs(arc.worst.er_db - true) < 0.1 for arc, true in found]) == 1.0
    assert np.mean([arc.kappa_low_rad_per_k <= 4.8 <= arc.kappa_high_rad_per_k for arc, _ in found]) >= 0.8
    assert all(arc.half_arc_rad == pytest.approx(half_arc_rad, rel=0.05) for arc, _ in found)


def test_unequal_ends_bound_both_extremes():
    """Launch 3° and splitter 2°: between -20 log tan 5° = 21.2 dB and -20 log tan 1° = 35.2 dB (F-77)."""
    at_us, leak, temperature_k, _ = leak_course(3, half_arc_rad=4.0, ends_deg=(3.0, 2.0), noise=0.002, noise_k=0.001)
    arc = fit_leak_arc(at_us, leak, temperature_k)
    assert arc.worst.er_db == pytest.approx(21.16, abs=0.05) and arc.best_er_db == pytest.approx(35.16, abs=0.5)
    assert arc.seen_er_db == pytest.approx(arc.worst.er_db, abs=0.05)


def test_without_temperature_noise_it_is_the_least_squares_fit():
    """scipy.optimize.least_squares on all readings, started near the truth."""
    at_us, leak, temperature_k, _ = leak_course(5, half_arc_rad=2.0, noise_k=0.0)
    arc = fit_leak_arc(at_us, leak, temperature_k)
    fraction, centred = leak / (1 + leak), temperature_k - 21.0

    def left(p):
        return (p[0] + p[1] * np.cos(p[3] * centred) + p[2] * np.sin(p[3] * centred) - fraction) * 1e3

    best = optimize.least_squares(left, [arc.mean_fraction, arc.swing_fraction, 0.0, 4.8], x_scale=[1e-3, 1e-3, 1e-3, 1.0])
    swing = np.hypot(best.x[1], best.x[2])
    assert arc.kappa_rad_per_k == pytest.approx(best.x[3], rel=2e-3)
    assert arc.mean_fraction + arc.swing_fraction == pytest.approx(best.x[0] + swing, rel=1e-3)


def test_a_wave_in_the_noise_widens_the_band():
    at_us, leak, temperature_k, _ = leak_course(7, half_arc_rad=2.0, noise=0.0, noise_k=0.001)
    random = np.random.default_rng(1)
    white = random.normal(size=len(leak))
    slow = np.repeat(random.normal(size=len(leak) // 30), 30)
    one = fit_leak_arc(at_us, leak * (1 + 0.02 * white), temperature_k)
    other = fit_leak_arc(at_us, leak * (1 + 0.02 * slow), temperature_k)
    assert other.inflation > 5 * one.inflation
    assert other.worst.high_db - other.worst.low_db > 2 * (one.worst.high_db - one.worst.low_db)


def test_no_relation_is_an_answer():
    """Leaks that know nothing of the temperature show an arc in at most 1 % of the seeds, white or wandering slowly."""
    shown = 0
    for seed in range(100):
        random = np.random.default_rng(seed)
        at_us, _, temperature_k, _ = leak_course(seed, half_arc_rad=1.0)
        noise = random.normal(size=len(at_us))
        if seed % 2:
            for k in range(1, len(noise)):
                noise[k] += 0.8 * noise[k - 1]
        shown += fit_leak_arc(at_us, 1e-3 * (1 + 0.05 * noise), temperature_k).verdict is not ArcVerdict.NO_ARC
    assert shown <= 3


def test_gaps_and_nan_are_left_out():
    at_us, leak, temperature_k, _ = leak_course(9, half_arc_rad=2.0)
    keep = (np.arange(len(leak)) % 400) < 250
    holed = np.where(keep, leak, np.nan)
    found, expected = fit_leak_arc(at_us, holed, temperature_k), fit_leak_arc(at_us[keep], leak[keep], temperature_k[keep])
    assert found == expected and found.readings == keep.sum()


def test_too_few_readings_constant_temperature_and_wrong_shapes():
    at_us, leak, temperature_k, _ = leak_course(9, half_arc_rad=2.0)
    assert fit_leak_arc(at_us[:29], leak[:29], temperature_k[:29]).verdict is ArcVerdict.NO_ARC
    still = fit_leak_arc(at_us, leak, np.full(len(leak), 21.0))
    assert still.verdict is ArcVerdict.NO_ARC and np.isnan(still.worst.er_db) and still.readings == len(leak)
    with pytest.raises(ValueError, match="one of each per reading"):
        fit_leak_arc(at_us, leak[:-1], temperature_k)


def test_noise_from_fourth_differences():
    """White noise of 0.3 on a cubic, which fourth differences remove exactly; a gap's readings are left out."""
    at = np.arange(20_000)
    level = 1e-9 * (at - 3000.0) ** 3 + 0.3 * np.random.default_rng(0).normal(size=len(at))
    level[10_000:] += 50.0
    at_us = at * 1_000_000
    at_us[10_000:] += 3_600_000_000
    floor, rise = noise_of(at_us, level)
    assert floor + rise * np.mean(level**2) == pytest.approx(0.09, rel=0.05)
    assert noise_of(at_us[:4], level[:4]) == (0.0, 0.0)


def test_noise_in_proportion_to_the_level():
    course = 2.0 + np.sin(np.arange(50_000) / 500)
    level = course * (1 + 0.02 * np.random.default_rng(0).normal(size=len(course)))
    floor, rise = noise_of(np.arange(len(course)) * 1_000_000, level)
    assert np.sqrt(rise) == pytest.approx(0.02, rel=0.1) and floor < 1e-4


def test_a_constant_leak_shows_no_arc():
    at_us = np.arange(100) * 1_000_000
    assert fit_leak_arc(at_us, np.full(100, 0.01), np.linspace(20.0, 22.0, 100)).verdict is ArcVerdict.NO_ARC
