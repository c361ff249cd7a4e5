"""Cells of closed days, in pages of about a thousand: so that a picture opens a few pages, however long its span.

A page is one tap's cells of one level between whole multiples of the page's length. Its columns are compressed apart, and
the database hands out only those that are asked for.
"""

from collections.abc import Callable, Sequence
from typing import Any, Final

import numpy as np
from django.db import connection
from psycopg import sql

from analysis.quantities import BoolArray, IntArray
from analysis.rollup.body import FRAMES, LAYOUT, Packed, cells_of_packed, columns_of, packed
from analysis.rollup.cells import LEVELS_S, Cells, concatenate
from ingest.times import SECOND_US

DAY_S: Final = LEVELS_S[-1]
PAGE_S: Final = dict(zip(LEVELS_S, (DAY_S, DAY_S, 8 * DAY_S, 8 * DAY_S, 1024 * DAY_S), strict=True))


def page_columns(
    tap_ids: Sequence[int], level_s: int, names: Sequence[str], from_us: int, until_us: int
) -> list[tuple[int, dict[str, np.ndarray[Any, Any]]]]:
    """(tap id, columns) of each page that overlaps the half-open span, oldest first: ``names`` of a cell, and ``bucket_us``."""
    wanted = ("bucket_us", *names)
    query = sql.SQL("SELECT tap_id, layout, count, {} FROM analysis_rolluppage WHERE tap_id = ANY(%s) AND level_s = %s "
                    "AND page_us > %s AND page_us < %s ORDER BY page_us").format(sql.SQL(", ").join(map(_frame, wanted)))
    with connection.cursor() as cursor:
        cursor.execute(query, [list(tap_ids), level_s, from_us - PAGE_S[level_s] * SECOND_US, until_us])
        return [(tap_id, columns_of(wanted, frames, count, layout)) for tap_id, layout, count, *frames in cursor.fetchall()]


def _frame(name: str) -> sql.Composable:
    """One column's bytes; SQL counts from 1."""
    place = FRAMES.index(name) + 1
    if place == 1:
        return sql.SQL("substring(body FROM 1 FOR ends[1])")
    return sql.SQL("substring(body FROM ends[{0}] + 1 FOR ends[{1}] - ends[{0}])").format(place - 1, place)


def page_cells(tap_id: int, level_s: int, at_us: int) -> Cells | None:
    """All cells of the page that holds a moment; None where there is none yet."""
    with connection.cursor() as cursor:
        cursor.execute("SELECT layout, count, ends, body FROM analysis_rolluppage "
                       "WHERE tap_id = %s AND level_s = %s AND page_us = %s", [tap_id, level_s, _page_us(level_s, at_us)])
        found = cursor.fetchone()
    if found is None:
        return None
    layout, count, ends, body = found
    return cells_of_packed(Packed(count, ends, bytes(body)), layout, level_s, tap_id)


def put_in_page(tap_id: int, cells: Cells, from_us: int, until_us: int) -> None:
    """Let ``cells`` stand for all that the page holds in the half-open span, which lies within one page."""
    _replace(tap_id, cells, from_us, lambda bucket_us: (bucket_us >= from_us) & (bucket_us < until_us))


def add_to_page(tap_id: int, cells: Cells) -> None:
    """Put cells into their page; they stand for those of the same buckets."""
    _replace(tap_id, cells, int(cells.bucket_us[0]), lambda bucket_us: np.isin(bucket_us, cells.bucket_us))


def _replace(tap_id: int, cells: Cells, at_us: int, is_replaced: Callable[[IntArray], BoolArray]) -> None:
    """The page that holds a moment, without what is replaced and with ``cells``."""
    old = page_cells(tap_id, cells.level_s, at_us)
    if old is not None:
        cells = concatenate([old.take(~is_replaced(old.bucket_us)), cells])
    _write(tap_id, cells, at_us)


def _write(tap_id: int, cells: Cells, at_us: int) -> None:
    page = packed(cells)
    with connection.cursor() as cursor:
        cursor.execute(
            """
            INSERT INTO analysis_rolluppage (tap_id, level_s, page_us, layout, count, ends, body)
            VALUES (%s, %s, %s, %s, %s, %s, %s)
            ON CONFLICT (tap_id, level_s, page_us) DO UPDATE
            SET layout = excluded.layout, count = excluded.count, ends = excluded.ends, body = excluded.body""",
            [tap_id, cells.level_s, _page_us(cells.level_s, at_us), LAYOUT, page.count, page.ends, page.body],
        )


def _page_us(level_s: int, at_us: int) -> int:
    length_us = PAGE_S[level_s] * SECOND_US
    return at_us // length_us * length_us
