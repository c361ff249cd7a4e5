"""Rollups that are due: claimed by tap, made anew, forgotten. Safe to run twice and by several workers."""

import time
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from django.db import connection, transaction

from analysis.record.rollup_rows import DAY_US, HOUR_S, Span, compact_day, is_closed, roll_up, roll_up_coarse
from ingest.models import Tap
from ingest.times import SECOND_US
from ingest.times import now_us as server_now_us
from labmon.claims import ROLLING, claim_taps
from labmon.pipeline.derived import mark_derived_due
from labmon.pipeline.nightly import mark_days

CHUNK_TAPS: Final = 256
FINE_S: Final = 10
#: The longest span of one tap made in one go, and about how many readings go through memory at once.
LONGEST_US: Final = DAY_US
CHUNK_READINGS: Final = 1_000_000


@dataclass(frozen=True, slots=True)
class _Due:
    tap: Tap
    ids: list[int]
    span: Span


def roll_up_due(now_us: int | None = None, *, for_s: float = float("inf")) -> int:
    """Make all due 10 s and 1 min rollups (or as many as ``for_s`` seconds allow); returns how many taps were visited."""
    visited, began = 0, time.monotonic()
    while time.monotonic() - began < for_s:
        step = _fine_chunk(server_now_us() if now_us is None else now_us)
        if not step:
            break
        visited += step
    return visited


def roll_up_coarse_due() -> int:
    """Make all due rollups coarser than a minute; returns how many taps were visited."""
    visited = 0
    while step := _coarse_chunk():
        visited += step
    return visited


@transaction.atomic
def _fine_chunk(now_us: int) -> int:
    dues = _claimed(FINE_S)
    if not dues:
        return 0
    pieces, rests = {}, []
    expected = 0.0
    chosen: list[_Due] = []
    for due in sorted(dues, key=lambda one: one.span.last_us - one.span.first_us):
        piece = _piece(due.span, now_us)
        expected += (piece.last_us - piece.first_us) / SECOND_US / (due.tap.interval_s or 1.0)
        if chosen and expected > CHUNK_READINGS:
            break
        chosen.append(due)
        pieces[due.tap.pk] = piece
        if piece.last_us < due.span.last_us:
            rests.append((due.tap.pk, FINE_S, piece.last_us + 1, due.span.last_us))
    roll_up([due.tap for due in chosen], pieces, now_us)
    hours = [
        (span.tap_id, HOUR_S, span.first_us, span.last_us)
        for span in pieces.values()
        if not is_closed(span.first_us // DAY_US * DAY_US, now_us)
    ]
    mark_derived_due([(span.tap_id, span.first_us, span.last_us) for span in pieces.values()])
    mark_days([(due.tap, pieces[due.tap.pk].first_us // DAY_US * DAY_US) for due in chosen], now_us)
    _replace([one for due in chosen for one in due.ids], rests + hours)
    return len(chosen)


@transaction.atomic
def _coarse_chunk() -> int:
    dues = _claimed(HOUR_S)
    roll_up_coarse([due.span for due in dues])
    _replace([one for due in dues for one in due.ids], [])
    return len(dues)


def _piece(span: Span, now_us: int) -> Span:
    """As much of a span as is made in one go: within a closed day, or within the open days."""
    day_us = span.first_us // DAY_US * DAY_US
    end_us = (
        min(span.last_us, day_us + DAY_US - 1) if is_closed(day_us, now_us) else min(span.last_us, span.first_us + LONGEST_US - 1)
    )
    return Span(span.tap_id, span.first_us, end_us)


def _claimed(level_s: int) -> list[_Due]:
    """Due spans of taps nobody else rolls up, each tap's marks as one span."""
    with connection.cursor() as cursor:
        cursor.execute(
            """SELECT tap_id FROM analysis_rollupdue WHERE level_s = %s AND EXISTS (SELECT FROM ingest_tap WHERE id = tap_id)
                          GROUP BY tap_id ORDER BY min(id) LIMIT %s""",
            [level_s, 4 * CHUNK_TAPS],
        )
        tap_ids = claim_taps(ROLLING, [row[0] for row in cursor.fetchall()], CHUNK_TAPS)
        cursor.execute(
            """SELECT tap_id, array_agg(id), array_agg(first_at_us), array_agg(last_at_us) FROM analysis_rollupdue
                          WHERE level_s = %s AND tap_id = ANY(%s) GROUP BY tap_id ORDER BY tap_id""",
            [level_s, tap_ids],
        )
        rows = cursor.fetchall()
    taps = {tap.pk: tap for tap in Tap.objects.filter(pk__in=[row[0] for row in rows])}
    return [_Due(taps[tap_id], *_first_run(tap_id, ids, firsts, lasts)) for tap_id, ids, firsts, lasts in rows if tap_id in taps]


def _first_run(tap_id: int, ids: Sequence[int], firsts: Sequence[int], lasts: Sequence[int]) -> tuple[list[int], Span]:
    """The earliest marks that lie within an hour of each other, as one span: a late mark does not drag in what lies between."""
    order = sorted(range(len(ids)), key=lambda number: firsts[number])
    taken, reach_us = [ids[order[0]]], lasts[order[0]]
    for number in order[1:]:
        if firsts[number] - reach_us > HOUR_S * SECOND_US:
            break
        taken.append(ids[number])
        reach_us = max(reach_us, lasts[number])
    return taken, Span(tap_id, firsts[order[0]], reach_us)


def _replace(done: Sequence[int], rests: Sequence[tuple[int, int, int, int]]) -> None:
    with connection.cursor() as cursor:
        if done:
            cursor.execute("DELETE FROM analysis_rollupdue WHERE id = ANY(%s)", [list(done)])
        if rests:
            cursor.execute(
                """INSERT INTO analysis_rollupdue (tap_id, level_s, first_at_us, last_at_us)
                              SELECT * FROM unnest(%s::bigint[], %s::int[], %s::bigint[], %s::bigint[])""",
                [list(column) for column in zip(*rests, strict=True)],
            )


def compact_closed_days(now_us: int | None = None, most: int = 2_000) -> int:
    """Put rows of closed days into pages; returns how many tap-days were done."""
    clock_us = server_now_us() if now_us is None else now_us
    with connection.cursor() as cursor:
        cursor.execute(
            """SELECT DISTINCT tap_id, bucket_us / %s * %s FROM analysis_rolluprow WHERE bucket_us < %s ORDER BY 2 LIMIT %s""",
            [DAY_US, DAY_US, clock_us // DAY_US * DAY_US, most],
        )
        waiting = cursor.fetchall()
    return sum(_compact(tap_id, day_us) for tap_id, day_us in waiting if is_closed(day_us, clock_us))


@transaction.atomic
def _compact(tap_id: int, day_us: int) -> bool:
    if not claim_taps(ROLLING, [tap_id], 1):
        return False
    compact_day(tap_id, day_us)
    return True
