"""The alarm list, and acknowledging."""

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import get_object_or_404, redirect, render
from django.urls import reverse
from django.utils import timezone
from django.utils.http import url_has_allowed_host_and_scheme
from django.views.decorators.http import require_POST, require_safe

from labmon.alarms.actions import acknowledge_alarm
from labmon.alarms.queries import alarm_rows
from labmon.errors import WriteError
from labmon.people.rights import Action, alarms_visible_to, may, require, stations_visible_to
from labmon.screen.alarm_view import STATE_WORDS, alarm_view, alarms_sentence
from labmon.screen.door import for_people, say_refusal
from labmon.screen.holds import holds_shown

PAGE_SIZE = 100
CHOICES = [("", "open or waiting"), ("all", "all, newest first"), *STATE_WORDS.items()]


@require_safe
@for_people
def alarms_page(request: HttpRequest) -> HttpResponse:
    """Open alarms and those that returned without anyone having acknowledged them; by choice any others."""
    asked = {name: request.GET.get(name, "") for name in ("state", "station")}
    before = request.GET.get("before", "")
    rows = alarm_rows(
        request.user,
        state=asked["state"] if asked["state"] in STATE_WORDS else None,
        station=asked["station"] or None,
        before_id=int(before) if before.isdecimal() else None,
        limit=PAGE_SIZE,
    )
    now = timezone.now()
    views = [alarm_view(row, now) for row in rows]
    if not asked["state"]:
        views = _current(request, asked["station"], now)
    sentence = alarms_sentence(views, is_filtered=any(asked.values()))
    older = views[-1].id if asked["state"] and len(rows) == PAGE_SIZE else None
    return render(
        request,
        "screen/alarms.html",
        {
            "sentence": sentence,
            "views": views,
            "waiting_views": [view for view in views if view.is_waiting],
            "other_views": [view for view in views if not view.is_waiting],
            **holds_shown(request, now, station=asked["station"] or None),
            "may_acknowledge": may(request.user, Action.ACKNOWLEDGE),
            "older": older,
            "asked": asked,
            "choices": CHOICES,
            "stations": list(stations_visible_to(request.user).order_by("name").values_list("name", flat=True)),
        },
    )


def _current(request: HttpRequest, station: str, now) -> list:
    """What is open and what waits, each once; waiting first, newest first."""
    wanted = {"station": station or None, "limit": 500}
    rows = {
        row.id: row
        for row in [
            *alarm_rows(request.user, is_open=True, **wanted),
            *alarm_rows(request.user, state="returned-unacknowledged", **wanted),
        ]
    }
    views = [alarm_view(row, now) for row in rows.values()]
    return sorted(views, key=lambda view: (not view.is_waiting, -view.raised_ms))


@require_POST
@for_people
def acknowledge(request: HttpRequest, alarm_id: int) -> HttpResponse:
    """Say "I have seen it", with a note if there is something to tell the others."""
    alarm = get_object_or_404(alarms_visible_to(request.user).select_related("tap"), pk=alarm_id)
    require(request.user, Action.ACKNOWLEDGE, alarm)
    try:
        acknowledge_alarm(alarm_id, by=request.user, note=request.POST.get("note", "").strip()[:500])
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, f"Acknowledged: {alarm.message}")
    back = request.POST.get("next", "")
    return redirect(back if url_has_allowed_host_and_scheme(back, allowed_hosts={request.get_host()}) else reverse("alarms"))
