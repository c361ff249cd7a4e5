"""Raw and reduced samples of a span, streamed piece by piece."""

import itertools
from collections.abc import AsyncIterator, Iterator
from datetime import datetime
from http import HTTPStatus
from typing import Any

import numpy as np
import pyarrow as pa
from asgiref.sync import sync_to_async
from django.core.handlers.asgi import ASGIRequest
from django.http import HttpRequest, StreamingHttpResponse

from analysis.models import TapCheckpoint
from analysis.record.reduce_span import Knowledge, knowledge_of, reduce_many
from analysis.reduce.sample import Reduced
from ingest.models import Tap, TapBoot
from ingest.store.columns import Readings, no_readings
from ingest.store.days.faults import known_holes, note_faults
from ingest.store.read import Hole, HoleKind, find_readings
from ingest.times import rfc3339_of
from labmon.api.chunks import chunks_of
from labmon.api.formats import TYPES, written
from labmon.api.named import tap_named, tap_path
from labmon.api.problem import Problem
from labmon.api.query import known_only, one_of, span_of, time_or_none
from labmon.api.span import Span
from labmon.api.table import table_of
from labmon.api.times import rfc3339
from labmon.audit.actions import note_export
from labmon.people.models import Person


def get_readings(request: HttpRequest, person: Person, station: str, tap: str) -> StreamingHttpResponse:
    """Every reading of the span with what was made of it, by the calibrations known at ``as_of`` (else now)."""
    known_only(request.GET, "span", "format", "as_of")
    span = span_of(request.GET)
    form = one_of(request.GET, "format", TYPES, default="json")
    as_of = time_or_none(request.GET, "as_of")
    row = tap_named(person, station, tap)
    holes = known_holes(row.pk, span.from_us, span.until_us)
    refuse_unreadable(holes)
    tables = tables_of(row, span, as_of)
    first = next(tables)    # faults come before the answer has begun
    about = {"tap": tap_path(row), "kind": row.kind, "unit": row.unit or None, "span": str(span), "as_of": rfc3339(as_of),
             "not_kept": [[rfc3339_of(hole.from_us), rfc3339_of(hole.until_us + 1)] for hole in holes]}
    note_export("export readings", row, {"span": str(span), "format": form, "as_of": rfc3339(as_of)}, by=person)
    parts = written(form, first.schema, itertools.chain([first], tables), about)
    answer = StreamingHttpResponse(for_server(request, parts), content_type=TYPES[form])
    answer.headers["Content-Disposition"] = f'attachment; filename="{station}-{tap}.{form}"'
    answer.headers["Cache-Control"] = "no-store"
    if holes:
        answer.headers["Labmon-Not-Kept"] = ", ".join("/".join(pair) for pair in about["not_kept"])
    return answer


def refuse_unreadable(holes: list[Hole]) -> None:
    """A span with readings that are known to be unreadable is not answered as if it were whole."""
    unreadable = [hole for hole in holes if hole.kind is HoleKind.UNREADABLE]
    if unreadable:
        spans = [[rfc3339_of(hole.from_us), rfc3339_of(hole.until_us + 1)] for hole in unreadable]
        raise Problem(HTTPStatus.CONFLICT, "Readings of this span cannot be read.",
                      f"{unreadable[0].why} Ask for spans beside it.", more={"unreadable": spans})


def tables_of(tap: Tap, span: Span, as_of: datetime | None) -> Iterator[pa.Table]:
    """The span's samples in pieces; the first is empty and shows the columns.

    The fold of frozen values runs through all pieces, from the last checkpoint before the span, so that a sample looks the
    same whatever span it is read in.
    """
    knowledge = knowledge_of([tap.pk], as_of)
    names: dict[int, str] = {}
    before = TapCheckpoint.objects.filter(tap=tap, at_us__lte=span.from_us).order_by("-at_us").first()
    start_us, flat = (before.at_us, before.state["flat"]) if before else (span.from_us, None)
    yield _table(tap, no_readings(), _reduced(tap, no_readings(), knowledge, None)[0], names)
    for from_us, until_us in chunks_of(tap.pk, start_us, span.until_us):
        found = find_readings(tap.pk, from_us, until_us)
        note_faults(found.holes)
        refuse_unreadable(list(found.holes))    # in the midst of an answer it breaks off: better than a silent hole
        readings = found.readings
        reduced, flat = _reduced(tap, readings, knowledge, flat)
        wanted = slice(int(np.searchsorted(readings.at_us, span.from_us)), None)
        if until_us > span.from_us:
            yield _table(tap, readings.pick(wanted), reduced.take(wanted), names)


def _reduced(tap: Tap, readings: Readings, knowledge: Knowledge, flat: Any) -> tuple[Reduced, Any]:
    made = reduce_many([tap], {tap.pk: readings}, knowledge, {tap.pk: flat})
    return made.samples_of(tap.pk), made.flat[tap.pk][-1]


def _table(tap: Tap, readings: Readings, reduced: Reduced, names: dict[int, str]) -> pa.Table:
    missing = set(readings.boot_id.tolist()) - names.keys()
    if missing:
        names.update(TapBoot.objects.filter(pk__in=missing).values_list("pk", "station_boot__boot"))
    return table_of(tap, readings, reduced, names)


def for_server(request: HttpRequest, parts: Iterator[bytes]) -> Any:
    """Under ASGI each part is made in the request's own thread, when the client has taken the one before."""
    return _in_thread(parts) if isinstance(request, ASGIRequest) else parts


async def _in_thread(parts: Iterator[bytes]) -> AsyncIterator[bytes]:
    while (part := await sync_to_async(next)(parts, None)) is not None:
        yield part
