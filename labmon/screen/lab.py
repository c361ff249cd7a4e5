"""The lab page and the JSON that keeps it fresh."""

from typing import Any

from django.http import HttpRequest, HttpResponse, JsonResponse
from django.shortcuts import render
from django.template.loader import render_to_string
from django.urls import reverse
from django.utils import timezone
from django.views.decorators.http import require_safe

from labmon.ahead.queries import warnings_ahead
from labmon.alarms.queries import WAITING_STATES, alarm_rows, waiting_count
from labmon.benches.queries import bench_rows
from labmon.people.rights import Action, may
from labmon.screen.ahead_view import shown_since, warning_views
from labmon.screen.alarm_view import alarm_view
from labmon.screen.door import for_people
from labmon.screen.holds import holds_shown
from labmon.screen.lab_rows import as_json, lab_view, title_of
from labmon.screen.snapshot import snapshot

MOST_WAITING = 5


@require_safe
@for_people
def lab_page(request: HttpRequest) -> HttpResponse:
    """All benches: the sentence, a rail for each room, and the table, worst first."""
    view = lab_view(bench_rows(request.user), timezone.now())
    may_add = may(request.user, Action.ADD_STATION)
    return render(request, "screen/lab.html", {"view": view, "title": title_of(view), "may_add": may_add} | _waiting(request))


@require_safe
@for_people
def lab_json(request: HttpRequest) -> HttpResponse:
    """The same truth for the open page; ``course=1`` adds the day's course."""
    view = lab_view(snapshot.rows_for(request.user), timezone.now())
    body = as_json(view, with_course=request.GET.get("course") == "1")
    body["waiting"] = render_to_string("screen/_lab_waiting.html", _waiting(request) | {"back": reverse("lab")}, request)
    return JsonResponse(
        body, json_dumps_params={"allow_nan": False, "ensure_ascii": False}, headers={"Cache-Control": "no-store"}
    )


def _waiting(request: HttpRequest) -> dict[str, Any]:
    """Alarms that nobody has acknowledged, newest first: the first few with their button."""
    now = timezone.now()
    rows = [row for state in WAITING_STATES for row in alarm_rows(request.user, state=state, limit=MOST_WAITING)]
    shown = [alarm_view(row, now) for row in rows[:MOST_WAITING]]
    return {
        **holds_shown(request, now),
        "ahead": warning_views(warnings_ahead(request.user, since=shown_since(now)), now),
        "waiting": shown,
        "more_waiting": waiting_count(request.user) - len(shown),
        "may_acknowledge": may(request.user, Action.ACKNOWLEDGE),
    }
