"""What the lab keeps, how much room it takes, what waits, and when the disk is full."""

import shutil
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from django.conf import settings
from django.db import connection

from ingest.store.days.storage import days_storage
from ingest.times import SECOND_US
from ingest.times import now_us as server_now_us

DAY_US: Final = 86_400 * SECOND_US
#: The forecast goes by so many data days that are sealed.
BASIS_DAYS: Final = 7


@dataclass(frozen=True, slots=True)
class Kept:
    """Readings of one form of storage and their bytes on the disk."""

    readings: int
    size: int

    @property
    def bytes_per_reading(self) -> float | None:
        """None where there are no readings."""
        return self.size / self.readings if self.readings else None


@dataclass(frozen=True, slots=True)
class Forecast:
    """When the disk is full, and by what this was reckoned.

    Attributes:
        growth: Bytes a day: day files of ``basis_days`` sealed days and what their rollups take; None without such a day.
        days_left: ``free / growth``; None where growth is not known.
    """

    free: int
    total: int
    growth: float | None
    basis_days: int

    @property
    def days_left(self) -> float | None:
        return self.free / self.growth if self.growth else None


@dataclass(frozen=True, slots=True)
class LabHealth:
    """Numbers of one look. Sizes in bytes, ages in s; ``faults`` are (file, why) of unreadable day files."""

    inbox: Kept
    blocks: Kept
    days: Kept
    database: int
    rollups: int
    touches: int
    oldest_touch_s: float | None
    inbox_rows: int
    rollups_due: int
    unsent_mails: int
    left_files: int
    faults: list[tuple[str, str]]
    forecast: Forecast


def lab_health(clock_us: int | None = None) -> LabHealth:
    """One look: two queries, however large the lab."""
    now_us = server_now_us() if clock_us is None else clock_us
    with connection.cursor() as cursor:
        cursor.execute(_NUMBERS, [DAY_US])
        (inbox_rows, inbox, inbox_size, blocks, blocks_size, days, days_size, database, rollups, rollup_days, touches, oldest_us,
         due, mails, left) = cursor.fetchone()
        cursor.execute(_DAYS, [BASIS_DAYS])
        faults, sizes = [], []
        for kind, name, why, size in cursor.fetchall():
            if kind == "fault":
                faults.append((name, why))
            else:
                sizes.append(int(size))
    growth = _growth(sizes, rollups, rollup_days)
    free, total = disk_room()
    return LabHealth(Kept(inbox, inbox_size), Kept(blocks, blocks_size), Kept(days, days_size), database, rollups, touches,
                     None if oldest_us is None else (now_us - oldest_us) / SECOND_US, inbox_rows, due, mails, left, faults,
                     Forecast(free, total, growth, len(sizes)))


def _growth(sizes: list[int], rollups: int, rollup_days: int) -> float | None:
    """Bytes a day: the mean of the sealed days, and the rollups' share of a day."""
    if not sizes:
        return None
    return sum(sizes) / len(sizes) + (rollups / rollup_days if rollup_days else 0.0)


def disk_room() -> tuple[int, int]:
    """Free and total bytes of the disk that fills first: the data folder's or the day files'."""
    folders = [Path(settings.DATA_DIR)]
    location: Any = getattr(days_storage(), "location", None)
    if location:
        folders.append(Path(location))
    rooms = [shutil.disk_usage(_existing(folder)) for folder in folders]
    tightest = min(rooms, key=lambda room: room.free)
    return tightest.free, tightest.total


def _existing(folder: Path) -> Path:
    while not folder.exists():
        folder = folder.parent
    return folder


_NUMBERS = """
    SELECT (SELECT count(*) FROM ingest_inboxrow), (SELECT coalesce(sum(count), 0)::bigint FROM ingest_inboxrow),
        pg_total_relation_size('ingest_inboxrow'),
        (SELECT coalesce(sum(count), 0)::bigint FROM ingest_block),
        pg_total_relation_size('ingest_block') + pg_total_relation_size('ingest_blockboot'),
        (SELECT coalesce(sum(count), 0)::bigint FROM ingest_dayfile),
        (SELECT coalesce(sum(size), 0)::bigint FROM ingest_dayfile)
            + pg_total_relation_size('ingest_dayfile') + pg_total_relation_size('ingest_dayfileboot'),
        pg_database_size(current_database()),
        pg_total_relation_size('analysis_rolluppage') + pg_total_relation_size('analysis_rolluprow'),
        (SELECT count(DISTINCT page_us) FROM analysis_rolluppage WHERE level_s = 10)
            + (SELECT count(DISTINCT bucket_us / %s) FROM analysis_rolluprow WHERE level_s = 86400),
        (SELECT count(*) FROM ingest_touch), (SELECT min(arrival_us) FROM ingest_touch),
        (SELECT count(*) FROM analysis_rollupdue),
        (SELECT count(*) FROM labmon_delivery WHERE sent_at IS NULL AND gave_up_at IS NULL),
        (SELECT count(*) FROM ingest_leftfile)"""
_DAYS = """
    (SELECT 'fault', name, fault, NULL::bigint FROM ingest_dayfile WHERE fault <> '' ORDER BY name LIMIT 100)
    UNION ALL
    (SELECT 'day', '', '', sum(size)::bigint FROM ingest_dayfile GROUP BY day_us ORDER BY day_us DESC LIMIT %s)"""
