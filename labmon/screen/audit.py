"""The audit: who changed what, when, from what, why."""

import json
from urllib.parse import urlencode

from django.http import HttpRequest, HttpResponse, HttpResponseBadRequest, HttpResponseBase
from django.shortcuts import render
from django.views.decorators.http import require_safe

from labmon.api.audit import NARROWING, export_answer, require_reader, wish_of
from labmon.api.problem import Problem
from labmon.audit.export import ExportForm
from labmon.audit.queries import AuditWish, audit_rows
from labmon.people.models import Role
from labmon.people.rights import role_of, stations_visible_to
from labmon.screen.door import for_people

PAGE_SIZE = 100


@require_safe
@for_people
def audit_page(request: HttpRequest) -> HttpResponse:
    """Newest first; managers see all, owners their own benches'."""
    require_reader(request.user)
    wish, fault = _wish(request)
    before = request.GET.get("before", "")
    rows = audit_rows(request.user, wish=wish, before_id=int(before) if before.isdecimal() and len(before) < 19 else None,
                      limit=PAGE_SIZE)
    narrowed = {name: request.GET[name] for name in NARROWING if request.GET.get(name)}
    return render(
        request,
        "screen/audit.html",
        {
            "rows": [(row, changes_of(row.before, row.after)) for row in rows],
            "narrowed": narrowed,
            "query": urlencode(narrowed),
            "fault": fault,
            "benches": list(stations_visible_to(request.user).order_by("name").values_list("name", flat=True))
            if role_of(request.user) is Role.MANAGER else sorted(bench.station.name for bench in request.user.benches
                                                                  .select_related("station")),
            "older": rows[-1].pk if len(rows) == PAGE_SIZE else None,
        },
    )


@require_safe
@for_people
def audit_export_page(request: HttpRequest) -> HttpResponseBase:
    """The same as a file; that it was taken is written into the audit."""
    require_reader(request.user)
    wish, fault = _wish(request)
    form = request.GET.get("format", "")
    if fault or form not in [one.value for one in ExportForm]:
        return HttpResponseBadRequest(fault or "format: choose csv or jsonl.", content_type="text/plain; charset=utf-8")
    return export_answer(request, request.user, wish, ExportForm(form), has_chain=request.GET.get("chain") == "yes")


def _wish(request: HttpRequest) -> tuple[AuditWish, str]:
    """What the address narrows to; a span that cannot be read narrows nothing and is told."""
    try:
        return wish_of(request.GET), ""
    except Problem as problem:
        rest = request.GET.copy()
        rest.pop("span", None)
        return wish_of(rest), f"The span cannot be used: {problem.detail} Shown is all time."


def changes_of(before: object, after: object) -> list[str]:
    """What differs, one field a line: ``alarm: 20.0 → 17.0``."""
    old, new = (side if isinstance(side, dict) else {} for side in (before, after))
    return [
        f"{field}: {_short(old.get(field))} → {_short(new.get(field))}"
        if before is not None
        else f"{field}: {_short(new.get(field))}"
        for field in dict.fromkeys([*old, *new])
        if old.get(field) != new.get(field)
    ]


def _short(value: object) -> str:
    text = "nothing" if value is None else value if isinstance(value, str) else json.dumps(value, ensure_ascii=False)
    return text if len(text) <= 120 else f"{text[:117]}…"
