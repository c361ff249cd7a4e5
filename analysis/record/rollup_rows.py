"""Rollup rows: made anew for touched spans.

Buckets of 10 s and 1 min follow the readings; the coarser ones are merged from minutes. Cells of open days are one row
each; those of closed days lie in pages (`rollup_pages`).
"""

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import msgspec
import numpy as np
from django.db import connection

from analysis.judge.interval import IntervalState
from analysis.record.reduce_span import knowledge_of, reduce_many
from analysis.record.rollup_pages import add_to_page, page_cells, put_in_page
from analysis.rollup.cells import LEVELS_S, Cells, cells_of, concatenate, empty_cells, holds_us, merge
from analysis.rollup.rows import cells_of_rows, row_bodies
from ingest.models import Tap
from ingest.store.days.faults import note_faults
from ingest.store.read import Hole, find_many
from ingest.times import SECOND_US

FINE_S, MINUTE_S, TEN_MINUTES_S, HOUR_S, DAY_S = LEVELS_S
DAY_US: Final = DAY_S * SECOND_US
#: A day counts as closed this long after its end: by then what comes for it is rare.
CLOSED_AFTER_US: Final = 3600 * SECOND_US
LONGEST_HOLD: Final = 3


@dataclass(frozen=True, slots=True)
class Span:
    """A touched span of a tap, µs, both ends included."""

    tap_id: int
    first_us: int
    last_us: int


def is_closed(day_us: int, now_us: int) -> bool:
    """True for days whose cells lie in pages."""
    return day_us + DAY_US + CLOSED_AFTER_US <= now_us


def roll_up(taps: Sequence[Tap], spans: Mapping[int, Span], now_us: int) -> None:
    """Make the 10 s and 1 min cells of one span a tap anew (in a closed day all levels); may run any number of times.

    A span must lie within one closed day, or in open days.
    """
    fine, holes = _fine_cells(sorted(taps, key=lambda tap: tap.pk), spans)
    closed = [tap_id for tap_id, span in spans.items() if is_closed(span.first_us // DAY_US * DAY_US, now_us)]
    is_in_closed = np.isin(fine.tap, closed)
    for tap_id in closed:
        span = spans[tap_id]
        has_holes = any(hole.from_us <= span.last_us and hole.until_us >= span.first_us for hole in holes.get(tap_id, ()))
        _store_closed(tap_id, fine.take(fine.tap == tap_id), is_complete=not has_holes)
    _store_open(fine.take(~is_in_closed))


def roll_up_coarse(spans: Sequence[Span]) -> None:
    """Make what is coarser than a minute of open days anew that the spans touch."""
    for from_s, to_s in itertools.pairwise((MINUTE_S, TEN_MINUTES_S, HOUR_S, DAY_S)):
        bounds: dict[int, tuple[int, int]] = {}
        for span in spans:
            first_us, behind_us = _floor(span.first_us, to_s), _floor(span.last_us, to_s) + to_s * SECOND_US
            known = bounds.get(span.tap_id, (first_us, behind_us))
            bounds[span.tap_id] = (min(known[0], first_us), max(known[1], behind_us))
        _write_rows(merge(_rows(bounds, from_s), to_s))


def compact_day(tap_id: int, day_us: int) -> None:
    """Put a closed day's rows into their pages."""
    for level_s in LEVELS_S:
        rows = _rows({tap_id: (day_us, day_us + DAY_US)}, level_s)
        if len(rows):
            add_to_page(tap_id, rows)
            _delete_rows(tap_id, level_s, day_us)


def _fine_cells(taps: Sequence[Tap], spans: Mapping[int, Span]) -> tuple[Cells, dict[int, tuple[Hole, ...]]]:
    """10 s cells of all taps (sorted by id), ``tap`` being the tap's id; and the holes among the readings per tap."""
    states = _states([tap.pk for tap in taps])
    bounds, starts = {}, {}
    for tap in taps:
        span, state = spans[tap.pk], states.get(tap.pk)
        hold_us = round(LONGEST_HOLD * _interval_s(tap, state) * SECOND_US)
        first_us = (span.first_us - hold_us) // (FINE_S * SECOND_US) * FINE_S * SECOND_US
        if span.first_us // DAY_US != first_us // DAY_US:
            first_us = span.first_us // DAY_US * DAY_US
        last_us = (span.last_us // (FINE_S * SECOND_US) + 1) * FINE_S * SECOND_US
        bounds[tap.pk] = (first_us, last_us, last_us + hold_us)
        starts[tap.pk] = next((snap for snap in reversed(state["snapshots"]) if snap[0] <= first_us), None) if state else None
    for tap_id, found in _checkpoints({tap_id: bounds[tap_id][0] for tap_id, start in starts.items() if start is None}).items():
        starts[tap_id] = found
    found = find_many(
        {tap.pk: (starts[tap.pk][0] if starts[tap.pk] else bounds[tap.pk][0], bounds[tap.pk][2]) for tap in taps}
    )
    note_faults(hole for one in found.values() for hole in one.holes)
    readings = {tap_id: one.readings for tap_id, one in found.items()}
    reduced = reduce_many(
        taps, readings, knowledge_of(bounds), {tap_id: start[1] if start else None for tap_id, start in starts.items()}
    )
    parts = [empty_cells(FINE_S)]
    for group in reduced.groups:
        kept, hold_parts, owners = [], [], []
        for tap, begin, end in zip(group.taps, group.first.tolist(), group.ends.tolist(), strict=True):
            at_us = group.samples.at_us[begin:end]
            low, high = np.searchsorted(at_us, bounds[tap.pk][:2])
            if high > low:
                following = int(at_us[high]) if high < len(at_us) else None
                hold_parts.append(holds_us(at_us[low:high], _interval_s(tap, states.get(tap.pk)), following))
                kept.append(np.arange(begin + low, begin + high))
                owners.append(np.full(high - low, tap.pk))
        if kept:
            parts.append(
                cells_of(group.samples.take(np.concatenate(kept)), FINE_S, np.concatenate(hold_parts), np.concatenate(owners))
            )
    return concatenate(parts), {tap_id: one.holes for tap_id, one in found.items() if one.holes}


def _interval_s(tap: Tap, state: Mapping[str, Any] | None) -> float:
    known = IntervalState.from_json(state["interval"]).interval_s if state else None
    return tap.interval_s or known or 1.0


def _states(tap_ids: list[int]) -> dict[int, dict[str, Any]]:
    with connection.cursor() as cursor:
        cursor.execute("SELECT tap_id, trust_state::text FROM analysis_tapnow WHERE tap_id = ANY(%s)", [tap_ids])
        return {tap_id: msgspec.json.decode(text) for tap_id, text in cursor.fetchall() if text != "{}"}


def _checkpoints(wanted: Mapping[int, int]) -> dict[int, tuple[int, Any]]:
    """The newest kept frozen-value state at or before a time, per tap."""
    if not wanted:
        return {}
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT asked.tap, point.at_us, (point.state->'flat')::text
                FROM unnest(%s::bigint[], %s::bigint[]) AS asked(tap, at_us)
            CROSS JOIN LATERAL (SELECT at_us, state FROM analysis_tapcheckpoint WHERE tap_id = asked.tap AND at_us <= asked.at_us
                                ORDER BY at_us DESC LIMIT 1) AS point""",
            [list(wanted), list(wanted.values())],
        )
        return {tap_id: (at_us, msgspec.json.decode(flat)) for tap_id, at_us, flat in cursor.fetchall()}


def _store_open(fine: Cells) -> None:
    if not len(fine):
        return
    _write_rows(fine)
    owners, starts = np.unique(fine.tap, return_index=True)
    ends = np.append(starts[1:], len(fine)) - 1
    minutes = {
        tap_id: (_floor(first_us, MINUTE_S), _floor(last_us, MINUTE_S) + MINUTE_S * SECOND_US)
        for tap_id, first_us, last_us in zip(
            owners.tolist(), fine.bucket_us[starts].tolist(), fine.bucket_us[ends].tolist(), strict=True
        )
    }
    _write_rows(merge(_rows(minutes, FINE_S), MINUTE_S))


def _store_closed(tap_id: int, fine: Cells, *, is_complete: bool) -> None:
    """Pages of a closed day: cells made anew replace those of their buckets, the coarser levels follow.

    Where raw readings are missing (no longer kept, or unreadable) the older cells know more than the new ones: they stay.
    """
    if not len(fine):
        return
    day_us = int(fine.bucket_us[0]) // DAY_US * DAY_US
    compact_day(tap_id, day_us)
    old = page_cells(tap_id, FINE_S, day_us)
    if old is not None:
        if is_complete:
            fine = concatenate([old.take(~np.isin(old.bucket_us, fine.bucket_us)), fine])
        else:
            fine = concatenate([old, fine.take(~np.isin(fine.bucket_us, old.bucket_us))])
    for level_s in LEVELS_S:
        fine = merge(fine, level_s)
        put_in_page(tap_id, fine, day_us, day_us + DAY_US)


def _floor(at_us: int, level_s: int) -> int:
    return at_us // (level_s * SECOND_US) * level_s * SECOND_US


def _rows(bounds: Mapping[int, tuple[int, int]], level_s: int) -> Cells:
    """Cells of open days within half-open bounds per tap, ``tap`` being the tap's id."""
    if not bounds:
        return empty_cells(level_s)
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT cell.tap_id, cell.bucket_us, cell.body
            FROM unnest(%s::bigint[], %s::bigint[], %s::bigint[]) AS asked(tap, from_us, until_us)
            JOIN analysis_rolluprow cell ON cell.tap_id = asked.tap AND cell.level_s = %s AND cell.bucket_us >= asked.from_us
                AND cell.bucket_us < asked.until_us ORDER BY cell.tap_id, cell.bucket_us""",
            [list(bounds), [one for one, _ in bounds.values()], [one for _, one in bounds.values()], level_s],
        )
        found = cursor.fetchall()
    if not found:
        return empty_cells(level_s)
    taps, buckets, bodies = zip(*found, strict=True)
    return cells_of_rows(bodies, level_s, np.array(taps, dtype=np.int64), np.array(buckets, dtype=np.int64))


def open_cells(tap_ids: Sequence[int], level_s: int, from_us: int, until_us: int) -> Cells:
    """Cells of open days whose buckets begin in the half-open span, sorted by (tap id, bucket)."""
    return _rows(dict.fromkeys(tap_ids, (from_us, until_us)), level_s)


def _write_rows(cells: Cells) -> None:
    if len(cells):
        with connection.cursor() as cursor:
            cursor.execute(
                """
                INSERT INTO analysis_rolluprow (tap_id, level_s, bucket_us, body)
                SELECT tap, %s, bucket, body FROM unnest(%s::bigint[], %s::bigint[], %s::bytea[]) AS t(tap, bucket, body)
                ON CONFLICT (tap_id, level_s, bucket_us) DO UPDATE SET body = excluded.body""",
                [cells.level_s, cells.tap.tolist(), cells.bucket_us.tolist(), row_bodies(cells)],
            )


def _delete_rows(tap_id: int, level_s: int, day_us: int) -> None:
    with connection.cursor() as cursor:
        cursor.execute(
            "DELETE FROM analysis_rolluprow WHERE tap_id = %s AND level_s = %s AND bucket_us >= %s AND bucket_us < %s",
            [tap_id, level_s, day_us, day_us + DAY_US],
        )
