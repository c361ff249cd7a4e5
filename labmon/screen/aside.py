"""Readings set aside: paged by number, so that the millionth page costs what the first does."""

import json

from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.views.decorators.http import require_safe

from ingest.times import at_of
from labmon.benches.queries import aside_rows
from labmon.screen.door import for_people
from labmon.screen.named import visible_station
from labmon.screen.present import time_text

PAGE_SIZE = 100


@require_safe
@for_people
def aside_page(request: HttpRequest, station: str) -> HttpResponse:
    """Newest first: the reading as it came, why it could not be used, what to do."""
    found = visible_station(request.user, station)
    before = request.GET.get("before", "")
    rows = aside_rows(found, before_id=int(before) if before.isdecimal() else None, limit=PAGE_SIZE)
    shown = [(row, time_text(at_of(row.arrival_us)), json.dumps(row.reading, ensure_ascii=False)) for row in rows]
    return render(
        request,
        "screen/aside.html",
        {"station": found, "rows": shown, "is_first": not before, "older": rows[-1].pk if len(rows) == PAGE_SIZE else None},
    )
