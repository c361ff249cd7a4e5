"""What is kept of each tap, by which rule, and what a rule would delete; a fixed number of queries."""

from dataclasses import dataclass
from datetime import datetime
from typing import Final

from django.db import connection

from ingest.models import KeepRule, Tap
from ingest.store.days.seal import day_of
from ingest.times import SECOND_US, at_of
from ingest.times import now_us as server_now_us

DAY_US: Final = 86_400 * SECOND_US


@dataclass(frozen=True, slots=True)
class TapKept:
    """One tap's raw readings: its own rule (None: the lab's holds), since when they are held, how many, in how much room."""

    id: int
    name: str
    rule: KeepRule | None
    oldest_at: datetime | None
    readings: int
    size: int
    forgotten: int
    """Days that are no longer kept."""


@dataclass(frozen=True, slots=True)
class WouldGo:
    """What the next night would delete."""

    days: int
    size: int
    oldest_at: datetime | None


def taps_kept() -> tuple[KeepRule | None, list[TapKept]]:
    """The lab's rule, and all taps by name; three queries."""
    rules = {rule.tap_id: rule for rule in KeepRule.objects.select_related("tap__station")}
    with connection.cursor() as cursor:
        cursor.execute(_KEPT)
        held = {row[0]: row[1:] for row in cursor.fetchall()}
    rows = []
    for tap_id, station, name in Tap.objects.order_by("station__name", "name").values_list("pk", "station__name", "name"):
        oldest_us, readings, size, forgotten = held.get(tap_id, (None, 0, 0, 0))
        rows.append(TapKept(tap_id, f"{station}/{name}", rules.get(tap_id), at_of(oldest_us) if oldest_us is not None else None,
                            readings, size, forgotten))
    return rules.get(None), rows


def would_go(tap: Tap | None, raw_days: int | None, *, ends_own: bool = False, clock_us: int | None = None) -> WouldGo:
    """What the next night would delete if this rule held; nothing is written.

    Args:
        tap: Whose rule; None for the lab's, which then concerns taps without a rule of their own.
        raw_days: None for ever. ends_own: The tap would follow the lab's rule instead.
    """
    if ends_own and tap is not None:
        lab = KeepRule.objects.filter(tap=None).first()
        raw_days = lab.raw_days if lab else None
    if raw_days is None:
        return WouldGo(0, 0, None)
    until_us = day_of((server_now_us() if clock_us is None else clock_us) - raw_days * DAY_US)
    with connection.cursor() as cursor:
        cursor.execute(_WOULD_GO, {"tap": tap.pk if tap else None, "until": until_us})
        days, size, oldest_us = cursor.fetchone()
    return WouldGo(days, int(size), at_of(oldest_us) if oldest_us is not None else None)


_KEPT = """
    SELECT tap_id, min(first_us), coalesce(sum(count), 0)::bigint, coalesce(sum(size), 0)::bigint, sum(gone)::bigint FROM (
        SELECT tap_id, min(first_at_us) AS first_us, sum(count) AS count, sum(size) AS size, 0 AS gone
            FROM ingest_dayfile GROUP BY tap_id
        UNION ALL SELECT tap_id, min(first_at_us), sum(count), sum(length(body)), 0 FROM ingest_block GROUP BY tap_id
        UNION ALL SELECT tap_id, min(first_at_us), sum(count), sum(length(body)), 0 FROM ingest_inboxrow GROUP BY tap_id
        UNION ALL SELECT tap_id, NULL, 0, 0, count(*) FROM ingest_forgottenday GROUP BY tap_id) AS part
    GROUP BY tap_id"""
_WOULD_GO = """
    SELECT count(*), coalesce(sum(size), 0)::bigint, min(day_us) FROM ingest_dayfile
    WHERE day_us < %(until)s AND CASE WHEN %(tap)s::bigint IS NULL
        THEN NOT EXISTS (SELECT FROM ingest_keeprule own WHERE own.tap_id = ingest_dayfile.tap_id)
        ELSE tap_id = %(tap)s::bigint END"""
