"""The audit: who changed what, when, from what, why."""

import json

from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.views.decorators.http import require_safe

from labmon.audit.queries import audit_rows
from labmon.errors import NotAllowed
from labmon.people.models import Role
from labmon.people.rights import role_of
from labmon.screen.door import for_people

PAGE_SIZE = 100


@require_safe
@for_people
def audit_page(request: HttpRequest) -> HttpResponse:
    """Newest first; managers see all, owners their own benches'."""
    if role_of(request.user) not in {Role.OWNER, Role.MANAGER}:
        raise NotAllowed("You may not read the audit. Ask a bench's owner or a lab manager.")
    before = request.GET.get("before", "")
    rows = audit_rows(
        request.user,
        subject=request.GET.get("subject") or None,
        before_id=int(before) if before.isdecimal() else None,
        limit=PAGE_SIZE,
    )
    shown = [(row, changes_of(row.before, row.after)) for row in rows]
    return render(
        request,
        "screen/audit.html",
        {"rows": shown, "subject": request.GET.get("subject", ""), "older": rows[-1].pk if len(rows) == PAGE_SIZE else None},
    )


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
