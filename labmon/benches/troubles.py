"""What a station's boots tell: its clock's course, two devices on one key, readings that never came."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

import numpy as np
from django.db import connection

from analysis.record.reduce_span import OVERLAP_LEAST_US
from ingest.clock_course import ClockCourse, clock_course
from ingest.files.origin import FILE_BOOT
from ingest.models import Station
from ingest.store.columns import Readings
from ingest.times import at_of

#: Boots that ended longer ago are history, told in the list of boots.
RECENT_US: Final = 7 * 86_400 * 1_000_000


@dataclass(frozen=True, slots=True)
class TwoDevices:
    """Two boots of one tap whose data times overlap."""

    tap: str
    boots: tuple[str, str]
    addresses: tuple[str, str]
    from_at: datetime
    until_at: datetime


@dataclass(frozen=True, slots=True)
class Missing:
    """Numbers of a boot that were counted and never came: overrun of a buffer, or still under way."""

    tap: str
    boot: str
    count: int


@dataclass(frozen=True, slots=True)
class Troubles:
    """All of it; ``clock`` is that of the newest batches, None where they tell nothing."""

    clock: ClockCourse | None
    two_devices: list[TwoDevices]
    missing: list[Missing]


NO_TROUBLES: Final = Troubles(None, [], [])
_BOOTS = """
    SELECT tap.name, boot.boot, boot.remote_address, held.first_at_us, held.last_at_us,
        upper(held.held) - lower(held.held) - (SELECT sum(upper(part) - lower(part)) FROM unnest(held.held) AS part)
    FROM ingest_tapboot AS held JOIN ingest_tap AS tap ON tap.id = held.tap_id
    JOIN ingest_stationboot AS boot ON boot.id = held.station_boot_id
    WHERE tap.station_id = %s AND boot.boot <> '' AND NOT starts_with(boot.boot, %s) AND held.last_at_us > %s
    ORDER BY tap.name, held.first_at_us LIMIT 500"""


def troubles_of(station: Station, newest: Mapping[int, Readings], now_us: int) -> Troubles:
    """What the newest boots and batches tell; one query.

    Args:
        newest: Newest readings by tap.
    """
    with connection.cursor() as cursor:
        cursor.execute(_BOOTS, [station.pk, FILE_BOOT, now_us - RECENT_US])
        rows = cursor.fetchall()
    return Troubles(
        clock=_clock(newest.values()),
        two_devices=_two_devices(rows),
        missing=[Missing(tap, boot, int(count)) for tap, boot, _, _, _, count in rows if count],
    )


def _clock(newest) -> ClockCourse | None:  # type: ignore[no-untyped-def]
    own = [readings.pick(~readings.is_server_timed) for readings in newest]
    if not own:
        return None
    return clock_course(np.concatenate([one.arrival_us for one in own]), np.concatenate([one.sent_us for one in own]))


def _two_devices(rows: Sequence[tuple]) -> list[TwoDevices]:
    """The last overlap of each tap."""
    found: dict[str, TwoDevices] = {}
    reach: tuple | None = None
    for row in rows:
        tap, boot, address, first_us, last_us, _ = row
        if reach is not None and reach[0] == tap:
            until_us = min(reach[4], last_us)
            if until_us - first_us >= OVERLAP_LEAST_US:
                found[tap] = TwoDevices(tap, (reach[1], boot), (reach[2], address), at_of(first_us), at_of(until_us))
            reach = row if last_us > reach[4] else reach
        else:
            reach = row
    return list(found.values())
