"""Casts doubt where a person must speak first: new firmware, ports that exchanged their light. Safe to run twice.

What a person has answered once is not asked again. Runs behind the readings; what it finds is marked from its own moment
on, and what was derived meanwhile is made anew.
"""

from typing import Final

import numpy as np
from django.db import connection, transaction
from django.db.models import Exists, OuterRef

from analysis.models import Doubt, TapNow
from analysis.quantities import linear_from_raw
from analysis.record.calibrations import versions_of
from analysis.record.doubts import note_doubt
from analysis.reduce.exchanged import LEAST_DB, exchange_at
from analysis.reduce.trust import Reason
from ingest.files.origin import FILE_BOOT
from ingest.models import Station, Tap, TapKind
from ingest.store.columns import Readings
from ingest.store.read import read_many
from ingest.times import SECOND_US, at_of
from ingest.times import now_us as server_now_us
from labmon.live.publish import publish
from labmon.logbook.actions import note_change
from labmon.logbook.models import ChangeKind, ConfigurationChange

#: A boot that began longer ago is history: nobody is asked about it any more.
FIRMWARE_RECENT_US: Final = 14 * 86_400 * SECOND_US
#: An exchange is looked for so far back; longer than any pause of the sweep that is not itself told of.
EXCHANGE_RECENT_US: Final = 3600 * SECOND_US
MOST_TAPS: Final = 100
_OVERLAP_US: Final = 2 * SECOND_US

_NEW_FIRMWARE = """
    SELECT tap.station_id, own.tap_id, boot.boot, own.first_at_us, before.firmware, boot.firmware
    FROM ingest_stationboot boot JOIN ingest_tapboot own ON own.station_boot_id = boot.id
    JOIN ingest_tap tap ON tap.id = own.tap_id
    JOIN LATERAL (
        SELECT earlier.firmware, held.last_at_us FROM ingest_tapboot held JOIN ingest_stationboot earlier
            ON earlier.id = held.station_boot_id
        WHERE held.tap_id = own.tap_id AND held.first_at_us < own.first_at_us AND earlier.firmware <> '' AND earlier.boot <> ''
            AND NOT starts_with(earlier.boot, %(file)s)
        ORDER BY held.first_at_us DESC LIMIT 1) before ON true
    WHERE boot.first_arrival_us > %(since_us)s AND boot.firmware <> '' AND boot.boot <> ''
        AND NOT starts_with(boot.boot, %(file)s) AND before.firmware <> boot.firmware
        AND before.last_at_us < own.first_at_us + %(overlap_us)s AND tap.kind <> 'climate'
        AND NOT EXISTS (SELECT FROM analysis_doubt known WHERE known.tap_id = own.tap_id AND known.reason = 'new_firmware'
                        AND known.about = boot.boot)
    ORDER BY own.first_at_us, own.tap_id LIMIT %(most)s"""


def cast_doubts(now_us: int | None = None) -> int:
    """Look for both; gives how many doubts are new."""
    clock_us = server_now_us() if now_us is None else now_us
    return doubt_new_firmware(clock_us) + doubt_exchanged_ports(clock_us)


@transaction.atomic
def doubt_new_firmware(now_us: int) -> int:
    """A boot with another firmware than the one before it: doubtful until zeros are taken or a person confirms.

    It is a configuration change of the bench as well. Two boots at once are two devices, no new firmware.
    """
    with connection.cursor() as cursor:
        cursor.execute(_NEW_FIRMWARE, {"file": FILE_BOOT, "since_us": now_us - FIRMWARE_RECENT_US, "overlap_us": _OVERLAP_US,
                                       "most": MOST_TAPS})
        rows = cursor.fetchall()
    count = 0
    for station_id, tap_id, boot, first_us, before, after in rows:
        text = f"{after} after {before}"
        if note_doubt(tap_id, Reason.NEW_FIRMWARE, boot, first_us, text):
            count += 1
            _note_new_firmware(station_id, boot, first_us, text)
    if rows:
        publish({"kind": "tap", "ids": sorted({row[1] for row in rows})})
    return count


def _note_new_firmware(station_id: int, boot: str, first_us: int, text: str) -> None:
    """Once for the bench, at its first tap."""
    said = f"New firmware in boot {boot}: {text}"
    if not ConfigurationChange.objects.filter(station_id=station_id, by=None, text=said).exists():
        note_change(Station.objects.get(pk=station_id), ChangeKind.OTHER, at_of(first_us), by=None, text=said)


def doubt_exchanged_ports(now_us: int) -> int:
    """Two-port taps whose unwanted port is the brighter one since one reading to the next, with the sum kept."""
    candidates = (TapNow.objects.filter(tap__kind=TapKind.TWO_PORT, sample__er_db__lt=-LEAST_DB,
                                        at_us__gt=now_us - EXCHANGE_RECENT_US)
                  .exclude(Exists(Doubt.objects.filter(tap=OuterRef("tap"), reason=Reason.PORTS_SWAPPED.code, answer="")))
                  .order_by("-at_us").values_list("tap_id", "at_us")[:MOST_TAPS])
    spans = {tap_id: (at_us - EXCHANGE_RECENT_US, at_us + 1) for tap_id, at_us in candidates}
    if not spans:
        return 0
    taps, readings, versions = Tap.objects.in_bulk(list(spans)), read_many(spans), versions_of(spans)
    count = 0
    for tap_id, own in readings.items():
        newest = versions.get(tap_id, [None])[-1]
        zeros = (newest.zero1, newest.zero2, newest.gain_ratio) if newest else (0.0, 0.0, 1.0)
        at_us = _exchanged_at_us(own, taps[tap_id].unit, *zeros)
        wanted = newest.wanted_port if newest else 1
        text = f"port {3 - wanted} became the brighter one within one reading, the sum of both stayed"
        if at_us is not None and note_doubt(tap_id, Reason.PORTS_SWAPPED, str(at_us), at_us, text):
            count += 1
            publish({"kind": "tap", "ids": [tap_id]})
    return count


def _exchanged_at_us(readings: Readings, unit: str, zero1: float, zero2: float, gain_ratio: float) -> int | None:
    if not len(readings):
        return None
    first = linear_from_raw(readings.column("port1"), unit) - zero1
    second = gain_ratio * (linear_from_raw(readings.column("port2"), unit) - zero2)
    place = exchange_at(np.nan_to_num(first), np.nan_to_num(second))
    return None if place is None else int(readings.at_us[place])
