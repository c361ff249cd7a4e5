"""A bench with nights behind it: readings one in 30 s, rolled up as they are in a running lab."""

import numpy as np

from ingest.times import SECOND_US, at_of
from labmon.experiments.actions import set_limit
from labmon.pipeline.catch_up import catch_up
from tests.factories import make_experiment, make_station, make_tap, store_readings

DAY_US = 86_400 * SECOND_US
HOUR_US = 3600 * SECOND_US
STEP_S = 30
#: Monday 4 March 2024, 20:00 UTC.
MONDAY_US = 1709582400 * SECOND_US
NIGHT_S = 43_200.0


def nights_of(count: int, bumps: dict[int, float] | None = None, calm_deg: float = 3.0) -> np.ndarray:
    """Angles, degrees, from Monday 20:00 on for ``count`` days; on a day of ``bumps`` it rises by so much for 5 min at 22:00."""
    per_day = 86_400 // STEP_S
    angle_deg = np.full(count * per_day, calm_deg)
    for day, by_deg in (bumps or {}).items():
        first = day * per_day + 7200 // STEP_S
        angle_deg[first:first + 300 // STEP_S] += by_deg
    return angle_deg


def er_of(angle_deg: np.ndarray) -> np.ndarray:
    """ER, dB, of an angle on the sphere."""
    return -20.0 * np.log10(np.tan(np.radians(angle_deg) / 2.0))


def bench_with(angle_deg: np.ndarray, *, owner=None, alarm_db: float = 20.0, name: str = "north-1"):
    """(experiment, tap, now µs): a two-port bench with these angles behind it, a limit, and everything rolled up."""
    tap = make_tap(make_station(name, owner=owner), "eom-in", interval_s=float(STEP_S))
    experiment = make_experiment(tap, owner=owner)
    at_us = MONDAY_US + STEP_S * SECOND_US * np.arange(len(angle_deg))
    set_limit(experiment, tap, "er_db", alarm=alarm_db, by=owner, valid_from=at_of(MONDAY_US))
    store_readings(tap, at_us, port1=1e-3, port2=1e-3 * 10 ** (-er_of(angle_deg) / 10), boot="b", sequence=np.arange(len(at_us)))
    now_us = int(at_us[-1]) + SECOND_US
    catch_up(now_us + 2 * DAY_US)
    return experiment, tap, now_us
