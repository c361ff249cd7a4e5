"""Allan deviation of aligned bin means, made of two public functions (docs/formulas.md, F-19)."""

import numpy as np

from analysis.drift.allan_curve import overlapping_allan_deviation
from analysis.drift.grid import means_on_grid


def aligned(at_us, level, tau_s):
    """(deviation, pairs) of means over bins that start at whole multiples of ``tau_s``, adjacent bins only."""
    curve = overlapping_allan_deviation(means_on_grid(at_us, level, tau_s).values, tau_s, np.array([1]))
    return float(curve.deviation[0]), int(curve.terms[0])
