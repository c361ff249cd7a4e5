"""Statistics of closed days: marked when a day is over or was rolled up again, made one tap-day at a time, some each run.

Safe to run twice and by several workers: a tap-day is claimed by its tap, stored by its natural key, and its marks are taken
off by the ids that were read before the readings were.
"""

import logging
import time
from collections.abc import Iterable
from typing import Final

from django.db import connection, transaction

from analysis.models import DayStatisticsDue
from analysis.record.rollup_rows import CLOSED_AFTER_US, DAY_US, is_closed
from analysis.record.statistics import store_day
from ingest.models import Tap, TapKind
from ingest.times import now_us as server_now_us
from labmon.claims import STATISTICS, claim_name, claim_taps

log = logging.getLogger(__name__)

#: Nights that a stopped beat missed are made up for so many days; older ones when their rollups are made anew.
LOOK_BACK_DAYS: Final = 8
_TRIED: Final = 64


def make_day_statistics(now_us: int | None = None, *, for_s: float = float("inf")) -> int:
    """Mark what is over, then make what is due, newest day first, as ``for_s`` seconds allow; returns how many were made."""
    clock_us, began, made = server_now_us() if now_us is None else now_us, time.monotonic(), 0
    mark_closed_days(clock_us)
    while time.monotonic() - began < for_s and _make_one(clock_us):
        made += 1
    if made:
        log.info("day_statistics_made", extra={"days": made, "took_s": round(time.monotonic() - began, 3)})
    return made


@transaction.atomic
def mark_closed_days(now_us: int) -> int:
    """Mark the last closed days of taps that were heard since and have neither row nor mark; returns how many."""
    if not claim_name("statistics"):
        return 0
    last_us = (now_us - CLOSED_AFTER_US) // DAY_US * DAY_US - DAY_US
    with connection.cursor() as cursor:
        cursor.execute(
            """
            INSERT INTO analysis_daystatisticsdue (tap_id, day_us)
            SELECT tap.id, day FROM ingest_tap tap JOIN ingest_tapheard heard ON heard.tap_id = tap.id,
                   generate_series(%(first)s::bigint, %(last)s::bigint, %(day)s::bigint) AS day
            WHERE tap.kind <> %(climate)s AND heard.last_at_us >= day
              AND EXISTS (SELECT FROM ingest_tapboot boot WHERE boot.tap_id = tap.id AND boot.first_at_us < day + %(day)s)
              AND NOT EXISTS (SELECT FROM analysis_daystatistics row WHERE row.tap_id = tap.id AND row.day_us = day)
              AND NOT EXISTS (SELECT FROM analysis_daystatisticsdue due WHERE due.tap_id = tap.id AND due.day_us = day)""",
            {"first": last_us - (LOOK_BACK_DAYS - 1) * DAY_US, "last": last_us, "day": DAY_US, "climate": TapKind.CLIMATE.value},
        )
        return cursor.rowcount


def mark_days(tap_days: Iterable[tuple[Tap, int]], now_us: int) -> None:
    """Mark closed days whose readings or calibration changed: called where their rollups are made anew."""
    DayStatisticsDue.objects.bulk_create(
        [DayStatisticsDue(tap=tap, day_us=day_us) for tap, day_us in tap_days
         if tap.kind != TapKind.CLIMATE and is_closed(day_us, now_us)]
    )  # fmt: skip


@transaction.atomic
def _make_one(now_us: int) -> bool:
    """The newest due day of a tap that nobody else works on; False where none is left."""
    with connection.cursor() as cursor:
        cursor.execute(
            "SELECT tap_id FROM analysis_daystatisticsdue GROUP BY tap_id ORDER BY max(day_us) DESC, tap_id LIMIT %s", [_TRIED]
        )
        claimed = claim_taps(STATISTICS, [row[0] for row in cursor.fetchall()], 1)
        if not claimed:
            return False
        cursor.execute(
            """SELECT day_us, array_agg(id) FROM analysis_daystatisticsdue WHERE tap_id = %s
               GROUP BY day_us ORDER BY day_us DESC LIMIT 1""",
            [claimed[0]],
        )
        row = cursor.fetchone()
    if row is None:
        return False
    tap = Tap.objects.filter(pk=claimed[0]).first()
    if tap is not None:
        store_day(tap, row[0])
    DayStatisticsDue.objects.filter(pk__in=row[1]).delete()
    return True
