"""The state a run would start from: a tap's newest minute, and whether it may be believed."""

from dataclasses import dataclass
from typing import Final

import numpy as np

from analysis.judge.rule import Quantity
from analysis.quantities import FloatArray, angle_rad_from_er_db
from analysis.record.reduce_span import find_samples
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import Reason, Trust, is_usable, reasons_in
from ingest.models import Tap
from ingest.times import SECOND_US

LEAST_SPAN_US: Final = 60 * SECOND_US
LEAST_INTERVALS: Final = 3.0
#: The state is believed if at least this share of the last minute's readings is trusted (own choice).
TRUSTED_SHARE: Final = 0.5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StartState:
    """Where a bench stands.

    Attributes:
        state: Mean angle, rad, or mean direction, shape (3,); NaN where nothing could be judged.
        at_us: Newest reading, µs; None without any.
        is_trusted: Most of the minute is trusted. why_not: What speaks against it, in words.
        is_at_floor: The angle is only known to be smaller than something beyond the limit.
        is_bound: The state is the floor's bound itself (within the limit).
    """

    state: FloatArray | float
    at_us: int | None
    is_trusted: bool
    why_not: tuple[str, ...] = ()
    is_at_floor: bool = False
    is_bound: bool = False


def start_state(tap: Tap, quantity: Quantity, at_us: int, limit_rad: float, *, interval_s: float,
                is_on_sphere: bool) -> StartState:
    """State of the minute (slow taps: of three intervals) that ends at ``at_us``.

    Args:
        limit_rad: A bound beyond it leaves the angle unknown. is_on_sphere: A direction is wanted (Stokes), not an angle.
    """
    span_us = max(LEAST_SPAN_US, round(LEAST_INTERVALS * interval_s * SECOND_US))
    samples, _ = find_samples(tap, at_us - span_us + 1, at_us + 1)
    nothing = np.full(3, np.nan) if is_on_sphere else float("nan")
    if not len(samples):
        return StartState(state=nothing, at_us=None, is_trusted=False, why_not=("no reading in the last minute",))
    newest_us = int(samples.at_us[-1])
    usable = is_usable(samples.trust[quantity], samples.values(quantity))
    trusted = usable & (samples.trust[quantity] == Trust.TRUSTED)
    is_trusted = bool(trusted.mean() >= TRUSTED_SHARE)
    why_not = () if is_trusted else _reasons(samples, quantity)
    if not usable.any():
        return StartState(state=nothing, at_us=newest_us, is_trusted=False, why_not=why_not)
    if is_on_sphere:
        return StartState(state=_direction(samples, usable), at_us=newest_us, is_trusted=is_trusted, why_not=why_not)
    angle_rad = float(np.mean(_angle_rad(samples, quantity)[usable]))
    is_bound = bool(samples.is_lower_bound[usable].all())
    return StartState(state=angle_rad, at_us=newest_us, is_trusted=is_trusted, why_not=why_not,
                      is_at_floor=is_bound and angle_rad > limit_rad, is_bound=is_bound)


def _angle_rad(samples: Reduced, quantity: Quantity) -> FloatArray:
    return samples.angle_rad if quantity is Quantity.ANGLE_DEG else angle_rad_from_er_db(samples.er_db)


def _direction(samples: Reduced, usable: np.ndarray) -> FloatArray:
    if samples.sop is None or not (rows := usable & np.isfinite(samples.sop).all(axis=1)).any():
        return np.full(3, np.nan)
    total = samples.sop[rows].sum(axis=0)
    length = float(np.linalg.norm(total))
    return total / length if length > 0.0 else np.full(3, np.nan)


def _reasons(samples: Reduced, quantity: Quantity) -> tuple[str, ...]:
    mask = int(np.bitwise_or.reduce(samples.reasons[quantity]))
    words = [reason.words.lower() for reason in reasons_in(mask) if reason is not Reason.FLOOR]
    return tuple(words) or ("it is not judged",)
