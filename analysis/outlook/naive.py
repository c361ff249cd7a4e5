"""Two rules of thumb that people go by; the back-test shows clearance beside them."""

import numpy as np

from analysis.quantities import FloatArray, er_db_from_angle_rad

MARGIN_DB = 3.0


def margin_rule(angle_now_rad: float, limit_rad: float, *, margin_db: float = MARGIN_DB) -> float:
    """Go if ER is 3 dB above the limit now: 1 where ER now ≥ ER of the limit + margin, else 0; NaN for an unread angle.

    Args:
        angle_now_rad, limit_rad: Angles on the sphere, rad. margin_db: dB.
    Source: docs/formulas.md, F-109.
    """
    if np.isnan(angle_now_rad):
        return float("nan")
    return float(er_db_from_angle_rad(angle_now_rad) >= er_db_from_angle_rad(limit_rad) + margin_db)


def past_share(held: FloatArray) -> float:
    """Share of earlier windows that held by themselves ("it mostly holds"), NaN without one. Source: F-109."""
    return float(np.mean(held)) if len(held) else float("nan")
