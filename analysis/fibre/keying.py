"""Several polarization-maintaining joints in series, each keyed with a small error.

Between two joints the fibre's phase wanders with temperature, so the ER wanders between a best and a worst value.
"""

from typing import Any

import numpy as np

from analysis.quantities import FloatArray, er_db_from_angle_rad


def keying_er_db_averaged(misalignments_rad: Any) -> FloatArray:
    """ER of the cross power averaged over all phases between the joints, dB.

    Args:
        misalignments_rad: Physical keying errors, rad, joints along the last axis, shape (..., J).
    Returns:
        10 log10[(1 + c)/(1 - c)], c the product of cos 2theta, shape (...); NaN if a joint is NaN.
    Source: docs/formulas.md, F-29; powers add, fields do not, once the phases are averaged.
    """
    angles = np.asarray(misalignments_rad, dtype=np.float64)
    products = np.cumprod(np.cos(2.0 * angles), axis=-1)
    # 1 - product without cancelling: each joint takes 2 sin^2(theta) of the contrast that reached it.
    reached = np.concatenate([np.ones_like(products[..., :1]), products[..., :-1]], axis=-1)
    lost = np.sum(reached * 2.0 * np.sin(angles) ** 2, axis=-1)
    contrast = products[..., -1]
    with np.errstate(divide="ignore"):
        return 10.0 * (np.log10(1.0 + contrast) - np.log10(np.maximum(lost, 0.0)))


def keying_er_db_worst(misalignments_rad: Any) -> FloatArray:
    """Lowest ER over all phases, dB: the sizes of the angles add (to 90 degrees at most). Shape (..., J) in, (...) out.

    Source: docs/formulas.md, F-29.
    """
    total_rad = np.sum(_sizes(misalignments_rad), axis=-1)
    return er_db_from_angle_rad(2.0 * np.minimum(total_rad, np.pi / 2))


def keying_er_db_best(misalignments_rad: Any) -> FloatArray:
    """Highest ER over all phases, dB: the largest angle less all others, inf where they can cancel it. Shapes as above.

    Holds while the angles add to 90 degrees at most. Source: docs/formulas.md, F-29.
    """
    sizes = _sizes(misalignments_rad)
    left_rad = 2.0 * np.max(sizes, axis=-1) - np.sum(sizes, axis=-1)
    left_rad = np.where(left_rad > 4.0 * np.spacing(np.sum(sizes, axis=-1)), left_rad, np.where(np.isnan(left_rad), np.nan, 0.0))
    return er_db_from_angle_rad(2.0 * left_rad)


def _sizes(misalignments_rad: Any) -> FloatArray:
    """Each error folded into [0, pi/2], the angle between two axes."""
    turned = np.mod(np.abs(np.asarray(misalignments_rad, dtype=np.float64)), np.pi)
    return np.minimum(turned, np.pi - turned)
