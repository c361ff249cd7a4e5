"""Two weeks and more of readings, written straight into the store's blocks."""

from dataclasses import dataclass

import numpy as np
from django.db import transaction

from ingest.models import Block, DayFile, StationBoot, Tap
from ingest.store.append import write_blocks
from labmon.demo.air import ROOMS, RoomPlan
from labmon.demo.benches import BENCHES, BenchPlan
from labmon.demo.live import CLIMATE_CADENCE_S, CLIMATE_FIRMWARE
from labmon.demo.lives import Delivery, Life, deliveries
from labmon.demo.moments import DAY_S
from labmon.demo.station import Say
from labmon.demo.world import World

RECENT_DAYS = 2
"""The last days are kept at the live pace, what lies before at ``EARLY_CADENCE_S``."""
EARLY_CADENCE_S, RECENT_CADENCE_S = 6.0, 1.0
"""Six seconds is the quickest pace at which the store keeps blocks of an hour: an early bench costs a third."""


@dataclass(frozen=True, slots=True)
class TimeAxis:
    """Where the lab's day 1 lies and where its history ends."""

    day_one_us: int
    until_us: int

    @property
    def until_s(self) -> float:
        """Length of the history, s."""
        return (self.until_us - self.day_one_us) / 1e6

    @property
    def recent_from_s(self) -> float:
        """Where the live pace begins, s."""
        return (self.until_s // DAY_S - RECENT_DAYS) * DAY_S

    @property
    def cadences(self) -> list[tuple[float, float]]:
        """(until_s, cadence_s) in order of time."""
        return [(self.recent_from_s, EARLY_CADENCE_S), (self.until_s, RECENT_CADENCE_S)]

    def us_of(self, at_s: np.ndarray) -> np.ndarray:
        """Times of the lab, s since day 1, as µs since 1970."""
        return self.day_one_us + np.round(at_s * 1e6).astype(np.int64)


def write_history(world: World, axis: TimeAxis, say: Say) -> int:
    """Write every tap's readings; a tap that has some already is left alone. Returns how many were written."""
    total = 0
    for room in ROOMS:
        total += write_room(world, room, axis)
    say(f"{total:,} readings of {len(ROOMS)} rooms written")
    for bench in BENCHES:
        count = write_bench(world, bench, axis)
        total += count
        say(f"{bench.name}: {count:,} readings written ({bench.experiment})")
    return total


def _has_history(tap: Tap) -> bool:
    return Block.objects.filter(tap=tap).exists() or DayFile.objects.filter(tap=tap).exists()


@transaction.atomic
def write_room(world: World, room: RoomPlan, axis: TimeAxis) -> int:
    """A room's climate readings, all or none."""
    tap = Tap.objects.select_related("station").get(station__name=room.station)
    if _has_history(tap):
        return 0
    at_s = np.arange(0.0, axis.until_s, CLIMATE_CADENCE_S)
    at_us = axis.us_of(at_s)
    life = Life(boot=f"{room.station}-1", firmware=CLIMATE_FIRMWARE, start_s=0.0, end_s=axis.until_s)
    count = write_blocks(tap, at_us, world.climate(room.name, at_s), boot=life.boot, sequence=np.arange(len(at_s)),
                         arrival_us=at_us + 200_000)
    _note_boot(tap, life, axis)
    return count


@transaction.atomic
def write_bench(world: World, bench: BenchPlan, axis: TimeAxis) -> int:
    """A bench's readings of all its boots, all or none."""
    tap = Tap.objects.select_related("station").get(station__name=bench.station)
    if _has_history(tap):
        return 0
    count = 0
    for delivery in deliveries(bench, axis.until_s, axis.cadences, world.ledger, world.seed):
        count += _write_delivery(world, bench, tap, delivery, axis)
        _note_boot(tap, delivery.life, axis)
    return count


def _write_delivery(world: World, bench: BenchPlan, tap: Tap, delivery: Delivery, axis: TimeAxis) -> int:
    """One life's readings; each pace is written by itself, so that its blocks get the length that suits it."""
    life = delivery.life
    columns = world.spare_readings(bench, delivery.at_s) if life.is_spare else world.readings(bench, delivery.at_s)
    own_us = np.where(np.isnan(delivery.own_s), np.round(delivery.uptime_s * 1e6).astype(np.int64),
                      axis.us_of(np.nan_to_num(delivery.own_s)))
    count = 0
    for part in (delivery.at_s < axis.recent_from_s, delivery.at_s >= axis.recent_from_s):
        count += write_blocks(tap, axis.us_of(delivery.at_s[part]), {name: column[part] for name, column in columns.items()},
                              boot=life.boot, sequence=delivery.sequence[part], arrival_us=axis.us_of(delivery.arrival_s[part]),
                              own_at_us=own_us[part], is_server_timed=bool(life.clock_fault))
    return count


def _note_boot(tap: Tap, life: Life, axis: TimeAxis) -> None:
    """What the door would have noted of a boot: firmware and what its clock was worth."""
    first_us, last_us = (int(us) for us in axis.us_of(np.array([life.start_s, life.end_s])))
    StationBoot.objects.filter(station_id=tap.station_id, boot=life.boot).update(
        firmware=life.firmware, first_arrival_us=first_us, last_arrival_us=last_us, is_server_timed=bool(life.clock_fault),
        clock_fault=life.clock_fault, clock_offset_us=round((0.2 - life.clock_ahead_s) * 1e6) if not life.unset_s else None,
        uptime_zero_us=first_us)
