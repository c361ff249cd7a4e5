"""Replayed courses for a picture."""

import numpy as np

from analysis.outlook.courses import replayed_courses_rad
from analysis.outlook.paths import gather_paths
from tests.analysis.outlook.nights import bumped, calm, night


def test_the_worst_of_each_step_from_todays_angle():
    """Nights at 3° replayed from 5°; the second stands 9° higher in minutes 90 to 93: step 1 of 12 shows 14°."""
    paths = gather_paths([calm(0), bumped(1, 9.0, 90, 4)])
    courses = replayed_courses_rad(paths, np.radians(5.0), None, np.array([1, 0]), 43_200.0, 12)
    np.testing.assert_allclose(np.degrees(courses[1]), 5.0)
    np.testing.assert_allclose(np.degrees(courses[0]), [5, 14] + [5] * 10)


def test_what_was_not_judged_is_a_gap():
    trusted = np.ones(720, bool)
    trusted[60:120] = False
    courses = replayed_courses_rad(gather_paths([night(0, np.full(720, 0.1), is_trusted=trusted)]), 0.1, None, np.array([0]),
                                   43_200.0, 12)
    assert np.isnan(courses[0, 1]) and np.isfinite(courses[0, [0, *range(2, 12)]]).all()


def test_stokes_courses_turn_with_today():
    away = np.array([np.cos(0.1), np.sin(0.1), 0.0])
    paths = gather_paths([night(0, np.vstack([np.tile([1.0, 0.0, 0.0], (360, 1)), np.tile(away, (360, 1))]))])
    courses = replayed_courses_rad(paths, away, np.array([1.0, 0.0, 0.0]), np.array([0]), 43_200.0, 2)
    np.testing.assert_allclose(courses[0], [0.1, 0.2], atol=1e-9)
