"""Cuts a span into pieces of bounded size, so that any span is read at constant memory."""

from collections.abc import Iterator

from django.db.models import Max

from ingest.models import Block, DayFile, InboxRow

READINGS_A_CHUNK = 25_000
ROWS_LOOKED_AT = 1000


def chunks_of(tap_id: int, from_us: int, until_us: int) -> Iterator[tuple[int, int]]:
    """Half-open pieces ``(from_us, until_us)`` in order, which together hold every stored reading of the span.

    A piece holds at most ``READINGS_A_CHUNK`` readings, more only where one stored row or one instant does; stretches
    without readings are left out.
    """
    longest_us = Block.objects.filter(tap_id=tap_id).aggregate(longest=Max("span_us"))["longest"] or 0
    while from_us < until_us:
        blocks = (Block.objects.filter(tap_id=tap_id, slot_us__gt=from_us - longest_us, slot_us__lt=until_us,
                                       last_at_us__gte=from_us, first_at_us__lt=until_us).order_by("slot_us"))
        inbox = InboxRow.objects.filter(tap_id=tap_id, last_at_us__gte=from_us, first_at_us__lt=until_us)
        lists = [list(rows.values_list("first_at_us", "count")[:ROWS_LOOKED_AT])
                 for rows in (blocks, inbox.order_by("first_at_us"))] + [_shares_of_days(tap_id, from_us, until_us)]
        if not any(lists):
            return
        start_us = max(from_us, min(rows[0][0] for rows in lists if rows))
        from_us = cut_us(lists, start_us, until_us)
        yield start_us, from_us


def _shares_of_days(tap_id: int, from_us: int, until_us: int) -> list[tuple[int, int]]:
    """Day files as rows of at most ``READINGS_A_CHUNK`` readings, evenly spread: a file is read in parts."""
    days = DayFile.objects.filter(tap_id=tap_id, last_at_us__gte=from_us, first_at_us__lt=until_us).order_by("day_us")
    rows = []
    for first_us, last_us, count in days.values_list("first_at_us", "last_at_us", "count")[:ROWS_LOOKED_AT]:
        shares = -(-count // READINGS_A_CHUNK)
        starts = [first_us + number * (last_us + 1 - first_us) // shares for number in range(shares)]
        rows += [(start_us, count // shares) for start_us, end_us in zip(starts, [*starts[1:], last_us + 1], strict=True)
                 if end_us > from_us and start_us < until_us]
    return rows


def cut_us(lists: list[list[tuple[int, int]]], from_us: int, until_us: int) -> int:
    """Where to end the piece that begins at ``from_us``: before the row that would make it too large.

    Args:
        lists: Of each kind of stored row the first ones that reach into the span, as (first_at_us, count), sorted; of a
            full list nothing is known beyond its last row.
    """
    for rows in lists:
        if len(rows) >= ROWS_LOOKED_AT:
            until_us = min(until_us, max(rows[-1][0], from_us + 1))
    total = 0
    for first_us, count in sorted(row for rows in lists for row in rows):
        if first_us >= until_us:
            break
        if total and first_us > from_us and total + count > READINGS_A_CHUNK:
            return first_us
        total += count
    return until_us
