"""The audit: what people changed, read a page at a time, and taken out as a file."""

from collections.abc import AsyncIterator, Iterator

from asgiref.sync import sync_to_async
from django.core.handlers.asgi import ASGIRequest
from django.http import HttpRequest, HttpResponse, QueryDict, StreamingHttpResponse

from labmon.api.answer import json_answer
from labmon.api.query import known_only, one_of, span_of, whole_number
from labmon.audit.actions import note_export
from labmon.audit.export import TYPES, ExportForm, entry_facts, exported
from labmon.audit.queries import AuditWish, audit_export, audit_rows, may_read_audit, newest_id
from labmon.errors import NotAllowed
from labmon.people.models import Person

LARGEST_ID = 2**63 - 1
NARROWING = ("bench", "subject", "person", "action", "span")


def get_audit(request: HttpRequest, person: Person) -> HttpResponse:
    """Entries, newest first; ``before`` leads on."""
    require_reader(person)
    known_only(request.GET, *NARROWING, "before", "count")
    count = whole_number(request.GET, "count", default=200, most=1000)
    before = whole_number(request.GET, "before", default=0, least=0, most=LARGEST_ID)
    rows = audit_rows(person, wish=wish_of(request.GET), before_id=before or None, limit=count)
    return json_answer({"entries": [entry_facts(row) for row in rows], "before": rows[-1].pk if len(rows) == count else None})


def get_audit_export(request: HttpRequest, person: Person) -> StreamingHttpResponse:
    """All of them as a file; that it was taken is written into the audit first."""
    require_reader(person)
    known_only(request.GET, *NARROWING, "format", "chain")
    form = ExportForm(one_of(request.GET, "format", [one.value for one in ExportForm], default=ExportForm.CSV.value))
    has_chain = one_of(request.GET, "chain", ("yes", "no"), default="no") == "yes"
    return export_answer(request, person, wish_of(request.GET), form, has_chain=has_chain)


def export_answer(request: HttpRequest, person: Person, wish: AuditWish, form: ExportForm, *, has_chain: bool
                  ) -> StreamingHttpResponse:
    """The file, streamed; up to the entry that tells of it."""
    until_id = newest_id()
    asked = {name: str(value) for name in AuditWish.__slots__ if (value := getattr(wish, name))}
    subject = f"station/{wish.bench}" if wish.bench else "audit"
    note_export("export audit", subject, asked | {"format": form.value, "chain": has_chain, "until_entry": until_id}, by=person)
    parts = exported(audit_export(person, wish, until_id), form, has_chain=has_chain)
    answer = StreamingHttpResponse(for_server(request, parts), content_type=TYPES[form])
    answer.headers["Content-Disposition"] = f'attachment; filename="labmon-audit.{form.value}"'
    answer.headers["Cache-Control"] = "no-store"
    return answer


def wish_of(query: QueryDict) -> AuditWish:
    """What a caller narrows to."""
    span = span_of(query) if query.get("span") else None
    named = {name: query.get(name, "").replace("\0", "")[:200] for name in ("bench", "subject", "person", "action")}
    return AuditWish(**named, from_at=span.from_at if span else None, until_at=span.until_at if span else None)


def require_reader(person: Person) -> None:
    """Raises NotAllowed for all but owners and managers."""
    if not may_read_audit(person):
        raise NotAllowed("You may not read the audit. Ask a bench's owner or a lab manager.")


def for_server(request: HttpRequest, parts: Iterator[bytes]) -> Iterator[bytes] | AsyncIterator[bytes]:
    """Under ASGI the pieces are made in a thread, a few hundred lines at a time, so that the loop stays free."""
    gathered = _gathered(parts)
    return _stepwise(gathered) if isinstance(request, ASGIRequest) else gathered


def _gathered(parts: Iterator[bytes], least: int = 65_536) -> Iterator[bytes]:
    held: list[bytes] = []
    size = 0
    for part in parts:
        held.append(part)
        size += len(part)
        if size >= least:
            yield b"".join(held)
            held, size = [], 0
    if held:
        yield b"".join(held)


async def _stepwise(parts: Iterator[bytes]) -> AsyncIterator[bytes]:
    step = sync_to_async(lambda: next(parts, None))
    while (piece := await step()) is not None:
        yield piece
