"""The two namings of circular light, and the two signs of time.

Two choices are independent of one another. *Naming*: S3 > 0 is right-handed for optics (clockwise for a viewer who faces
the source) and left-handed for IEEE and IAU; an instrument of the other naming has the sign of S3 turned. *Sign of
time*: this package writes fields exp(+i(wt - kz)); with exp(-i(wt - kz)) every Jones vector and matrix is conjugate,
while the light and its Stokes vector are the same. Source: docs/formulas.md, F-12, F-33.
"""

from enum import StrEnum
from typing import Any

import numpy as np
from numpy.typing import NDArray

from analysis.quantities import FloatArray


class Handedness(StrEnum):
    """Which sense of rotation counts as positive S3 and positive ellipticity."""

    OPTICS = "optics"
    IEEE = "ieee"


def stokes_in(wanted: Handedness, stokes: Any, *, given: Handedness) -> FloatArray:
    """Stokes vectors (..., 4), or their last three parts (..., 3), in another naming: S3 changes sign, nothing else."""
    stokes = np.array(stokes, dtype=np.float64)
    if stokes.shape[-1:] not in ((3,), (4,)):
        raise ValueError(f"stokes has shape {stokes.shape}; its last axis must hold 3 or 4 parts.")
    if wanted != given:
        stokes[..., -1] *= -1.0
    return stokes


def ellipticity_rad_in(wanted: Handedness, ellipticity_rad: Any, *, given: Handedness) -> FloatArray:
    """Ellipticity, rad, any shape, in another naming: its sign turns."""
    return np.asarray(ellipticity_rad, dtype=np.float64) * (1.0 if wanted == given else -1.0)


def mueller_in(wanted: Handedness, mueller: Any, *, given: Handedness) -> FloatArray:
    """Mueller matrices (..., 4, 4) in another naming: the last row and the last column change sign."""
    mueller = np.array(mueller, dtype=np.float64)
    if mueller.shape[-2:] != (4, 4):
        raise ValueError(f"mueller has shape {mueller.shape}; its last axes must be 4 by 4.")
    if wanted != given:
        mueller[..., 3, :] *= -1.0
        mueller[..., :, 3] *= -1.0
    return mueller


def with_other_time_sign(jones: Any) -> NDArray[np.complex128]:
    """Jones vectors or matrices, any shape, from exp(+i(wt - kz)) to exp(-i(wt - kz)) or back: the conjugate."""
    return np.conj(np.asarray(jones, dtype=np.complex128))
