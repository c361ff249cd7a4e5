"""Replayed paths for a picture: the worst angle of each of a few equal steps of a window."""

import numpy as np

from analysis.outlook.paths import Paths
from analysis.outlook.replay import replayed_angles_rad
from analysis.quantities import US_PER_S, FloatArray, IntArray


def replayed_courses_rad(paths: Paths, now: FloatArray | float, wanted: FloatArray | None, index: IntArray, length_s: float,
                         steps: int) -> FloatArray:
    """How chosen windows would go from today's state.

    Args:
        paths: All windows. now: Today's angle, rad, or state, shape (3,). wanted: Shape (3,) for Stokes, None for angles.
        index: Windows to draw, shape (K,). length_s: Length of the picture, s. steps: Steps of equal length.
    Returns:
        Largest judged angle of each step, rad, shape (K, steps); NaN where nothing was judged.
    Source: docs/formulas.md, F-92, F-93.
    """
    angle_rad = np.where(paths.held_s > 0.0, replayed_angles_rad(paths, now, wanted), np.nan)
    courses = np.full((len(index), steps), np.nan)
    for row, number in enumerate(index):
        part = slice(int(paths.first[number]), int(paths.first[number + 1]))
        since_s = (paths.at_us[part] - paths.windows[number].start_us) / US_PER_S
        step = np.floor(since_s * steps / length_s).astype(np.int64)
        inside = (step >= 0) & (step < steps) & np.isfinite(angle_rad[part])
        np.fmax.at(courses[row], step[inside], angle_rad[part][inside])
    return courses
