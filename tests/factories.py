"""Rows with sensible defaults, for every test that needs a lab."""

from datetime import UTC, datetime, timedelta
from itertools import count
from typing import Any

import numpy as np

from ingest.models import Room, Station, StationBoot, Tap, TapBoot, TapKind, Unit
from ingest.store.append import write_blocks
from labmon.alarms.models import Alarm
from labmon.alarms.states import state_of
from labmon.benches.models import Bench
from labmon.experiments.models import Experiment
from labmon.people.models import Person, Role
from labmon.runs.models import Run

#: A moment that tests start from: a whole minute, a whole hour.
NOON = datetime(2031, 3, 4, 12, tzinfo=UTC)
NOON_US = int(NOON.timestamp()) * 1_000_000
_number = count(1)


def make_person(role: Role = Role.MANAGER, **fields: Any) -> Person:
    """Someone with ``role``; signs in by ``client.force_login``."""
    return Person.objects.create(**{"username": f"{role}{next(_number)}", "role": role} | fields)


def make_station(name: str = "", *, owner: Person | None = None, room: str = "") -> Station:
    """A bench's station, without key."""
    kept_in = Room.objects.get_or_create(name=room)[0] if room else None
    station = Station.objects.create(name=name or f"bench-{next(_number)}", room=kept_in)
    Bench.objects.create(station=station, owner=owner)
    return station


def make_tap(
    station: Station | None = None,
    name: str = "",
    *,
    kind: TapKind = TapKind.TWO_PORT,
    unit: Unit = Unit.W,
    interval_s: float | None = 1.0,
) -> Tap:
    """A two-port tap in W that reads once a second, unless said."""
    return Tap.objects.create(
        station=station or make_station(),
        name=name or f"tap-{next(_number)}",
        kind=kind,
        unit="" if kind == TapKind.CLIMATE else unit,
        interval_s=interval_s,
    )


def make_boot(tap: Tap, boot: str = "") -> TapBoot:
    """A boot of the tap's station, first heard at noon."""
    station_boot, _ = StationBoot.objects.get_or_create(
        station=tap.station,
        boot=boot or f"boot{next(_number)}",
        defaults={"first_arrival_us": NOON_US, "last_arrival_us": NOON_US},
    )
    return TapBoot.objects.get_or_create(
        tap=tap, station_boot=station_boot, defaults={"first_at_us": NOON_US, "last_at_us": NOON_US}
    )[0]


def make_experiment(*taps: Tap, owner: Person | None = None, **fields: Any) -> Experiment:
    """An experiment that watches ``taps``."""
    experiment = Experiment.objects.create(**{"name": f"experiment {next(_number)}", "owner": owner} | fields)
    experiment.taps.set(taps)
    return experiment


def make_run(experiment: Experiment, starts_at: datetime = NOON, length_s: float = 3600.0, **fields: Any) -> Run:
    """A run on all that ``experiment`` watches, written as it is: no check, no audit."""
    ends_at = starts_at + timedelta(seconds=length_s)
    run = Run.objects.create(
        **{"experiment": experiment, "name": f"run {next(_number)}", "starts_at": starts_at, "ends_at": ends_at} | fields
    )
    run.taps.set(experiment.taps.all())
    return run


def store_alarm(**fields: Any) -> Alarm:
    """An alarm with the state that its facts give."""
    alarm = Alarm(**fields)
    alarm.state = state_of(alarm)
    alarm.save()
    return alarm


def store_readings(tap: Tap, at_us: Any, *, arrival_us: Any = None, boot: str = "", sequence: Any = None, **columns: Any) -> None:
    """Raw readings, as heard at their own time unless said, with a mark for the pipeline; a column may be one number for all."""
    at_us = np.asarray(at_us, dtype=np.int64)
    filled = {name: np.broadcast_to(np.asarray(values, dtype=np.float64), at_us.shape).copy() for name, values in columns.items()}
    write_blocks(tap, at_us, filled, boot=boot, sequence=sequence, arrival_us=at_us if arrival_us is None else arrival_us)
