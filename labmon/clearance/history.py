"""The past of one limit as windows, from rollups alone: bounded in memory and time however long the bench has been there."""

from dataclasses import dataclass
from datetime import datetime
from typing import Final

import numpy as np
from django.db.models import Min

from analysis.outlook.minutes import Air, Happenings, day_starts, windows_of
from analysis.outlook.paths import Paths, gather_paths
from analysis.quantities import US_PER_S, FloatArray
from analysis.record.calibrations import version_at
from analysis.record.minutes import air_hours, angle_minutes, sop_minutes
from analysis.record.reduce_span import tap_calibration
from ingest.models import Tap, TapBoot, TapKind
from ingest.times import at_of
from labmon.benches.air import air_tap
from labmon.clearance.happened import happenings
from labmon.clearance.limits import AskedLimit

HALF_DAY_US: Final = 43_200 * US_PER_S


@dataclass(frozen=True, slots=True, eq=False)
class LimitHistory:
    """Windows of a limit's tap.

    Attributes:
        paths: The windows; None: the tap has none.
        wanted: Wanted state of a Stokes tap, shape (3,); None for angles.
        happened: What is known of the past. air: The room's temperatures; None where nobody measures them.
        doubtful_share: Share of the windows' judged time that was doubtful; 0 without any.
        is_told: False for a Stokes tap without wanted state: its angle has no meaning yet.
    """

    paths: Paths | None
    wanted: FloatArray | None
    happened: Happenings
    air: Air | None
    doubtful_share: float
    is_told: bool = True


def limit_history(asked: AskedLimit, start_us: int, length_s: float, until_us: int, *, allows_air: bool = True) -> LimitHistory:
    """Windows of a run's length that were over by ``until_us``, one a day at the run's hour.

    Args:
        start_us, length_s: The run's. allows_air: Look for the room's temperatures too.
    """
    tap = asked.tap
    wanted = wanted_state(tap, at_of(until_us)) if tap.kind == TapKind.STOKES else None
    first_us = TapBoot.objects.filter(tap=tap).aggregate(first=Min("first_at_us"))["first"]
    starts = () if first_us is None else day_starts(start_us, length_s, first_us - round(length_s * US_PER_S), until_us)
    is_told = tap.kind != TapKind.STOKES or wanted is not None
    if not starts or not is_told:
        return LimitHistory(None, wanted, happenings(tap, first_us or until_us, until_us), None, 0.0, is_told)
    from_us = max(starts[0] - HALF_DAY_US, first_us - 60 * US_PER_S)
    end_us = min(starts[-1] + round(length_s * US_PER_S) + HALF_DAY_US, until_us)
    is_paced = tap.interval_s is not None
    minutes = (angle_minutes(tap.pk, asked.quantity, from_us, end_us, is_paced=is_paced) if wanted is None
               else sop_minutes(tap.pk, asked.quantity, from_us, end_us, wanted, is_paced=is_paced))
    happened = happenings(tap, from_us, until_us)
    sensor = air_tap(tap) or tap if allows_air else None
    air = None if sensor is None else air_hours(sensor.pk, from_us, end_us)
    windows = windows_of(minutes, starts, length_s, asked.limit_rad, happened=happened, air=air)
    judged_s = float(minutes.judged_s.sum())
    return LimitHistory(gather_paths(windows, length_s) if windows else None, wanted, happened, air,
                        float(minutes.doubtful_s.sum()) / judged_s if judged_s > 0.0 else 0.0)


def wanted_state(tap: Tap, at: datetime) -> FloatArray | None:
    """The wanted state that holds at a moment, unit vector; None where nobody has set one."""
    state = tap_calibration(version_at(tap.pk, at)).wanted_state
    return None if state is None else np.asarray(state, dtype=np.float64)
