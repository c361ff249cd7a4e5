"""Keeping alarms quiet: the banner that says so, and the forms that begin and end it."""

from collections import defaultdict
from datetime import datetime
from typing import Any

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import get_object_or_404, redirect
from django.urls import reverse
from django.utils.http import url_has_allowed_host_and_scheme
from django.views.decorators.http import require_POST

from ingest.models import Station
from labmon.alarms.holding import Held, end_hold, shelve, take_out_of_service
from labmon.alarms.models import AlarmHold, AlarmKind, HoldKind
from labmon.alarms.queries import hold_rows
from labmon.errors import WriteError
from labmon.experiments.models import Limit
from labmon.people.rights import Action, alarms_visible_to, experiments_visible_to, may, require, taps_visible_to
from labmon.screen.door import for_people, say_refusal
from labmon.screen.hold_view import HoldView, held_words, hold_view
from labmon.screen.named import visible_station

ACTION_OF = {HoldKind.SHELVED: Action.SHELVE, HoldKind.OUT_OF_SERVICE: Action.TAKE_OUT}
#: Times one may choose; the action holds them to the 4 h.
SHELF_TIMES = [(1800, "30 min"), (3600, "1 h"), (7200, "2 h"), (14_400, "4 h")]
OUT = "out"


def holds_shown(request: HttpRequest, now: datetime, *, station: str | None = None) -> dict[str, Any]:
    """What the banner and the shelving forms of a page need."""
    rows = hold_rows(request.user, station=station)
    views: list[HoldView] = [
        hold_view(hold, now, may_end=may(request.user, ACTION_OF[HoldKind(hold.kind)], hold.tap)) for hold in rows
    ]
    return {"holds": views, "shelf_times": SHELF_TIMES, "may_shelve": may(request.user, Action.SHELVE)}


def quiet_choices(request: HttpRequest, station: Station) -> dict[str, Any]:
    """What of a bench one may keep quiet, and for how long."""
    taps = list(station.taps.order_by("name"))
    limits = Limit.objects.filter(tap__in=taps, experiment__in=experiments_visible_to(request.user))
    limits_of: dict[int, list[Limit]] = defaultdict(list)
    for limit in limits.select_related("experiment", "tap").order_by("pk"):
        limits_of[limit.tap_id].append(limit)
    choices = []
    for tap in taps:
        choices.append((f"{tap.pk}::", f"{tap.name}: all its alarms"))
        for limit in limits_of[tap.pk]:
            words = held_words(AlarmHold(tap=tap, limit=limit, alarm_kind=AlarmKind.LIMIT))
            choices.append((f"{tap.pk}:limit:{limit.pk}", f"{tap.name}: {words}"))
        for kind in (AlarmKind.NO_READING, AlarmKind.UNTRUSTED):
            choices.append((f"{tap.pk}:{kind}:", f"{tap.name}: {held_words(AlarmHold(alarm_kind=kind))}"))
    times = [*SHELF_TIMES]
    if may(request.user, Action.TAKE_OUT, station):
        times.append((OUT, "out of service until put back"))
    return {"quiet_choices": choices, "quiet_times": times}


@require_POST
@for_people
def shelve_page(request: HttpRequest, alarm_id: int) -> HttpResponse:
    """Shelve one alarm for a stated time."""
    alarms = alarms_visible_to(request.user).select_related("tap__station", "limit")
    alarm = get_object_or_404(alarms, pk=alarm_id)
    require(request.user, Action.SHELVE, alarm)
    _begin(request, Held.of_alarm(alarm))
    return _back(request)


@require_POST
@for_people
def quiet_page(request: HttpRequest, station: str) -> HttpResponse:
    """Shelve a tap's alarms, or take them out of service."""
    found = visible_station(request.user, station)
    tap_id, _, rest = request.POST.get("what", "").partition(":")
    kind, _, limit_id = rest.partition(":")
    tap = get_object_or_404(found.taps.select_related("station"), pk=tap_id if tap_id.isdecimal() else 0)
    limit = None
    if kind == AlarmKind.LIMIT:
        own = Limit.objects.filter(tap=tap, experiment__in=experiments_visible_to(request.user))
        limit = get_object_or_404(own, pk=limit_id if limit_id.isdecimal() else 0)
    require(request.user, Action.TAKE_OUT if request.POST.get("for_s") == OUT else Action.SHELVE, tap)
    _begin(request, Held(tap, kind if kind in AlarmKind.values else "", limit))
    return _back(request)


@require_POST
@for_people
def end_hold_page(request: HttpRequest, hold_id: int) -> HttpResponse:
    """End a hold before its time."""
    rows = AlarmHold.objects.filter(tap__in=taps_visible_to(request.user)).select_related("tap__station")
    hold = get_object_or_404(rows, pk=hold_id)
    require(request.user, ACTION_OF[HoldKind(hold.kind)], hold.tap)
    end_hold(hold.pk, by=request.user)
    messages.success(request, f"{hold.tap.station.name}/{hold.tap.name} calls again.")
    return _back(request)


def _begin(request: HttpRequest, held: Held) -> None:
    typed, reason = request.POST.get("for_s", ""), request.POST.get("reason", "")
    try:
        if typed == OUT:
            take_out_of_service(held, by=request.user, reason=reason)
        else:
            shelve(held, by=request.user, for_s=_seconds(typed), reason=reason)
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, "Quiet from now on. Readings are judged all the same; the banner says until when.")


def _seconds(typed: str) -> float:
    try:
        return float(typed)
    except ValueError as error:
        raise WriteError("for_s", f"{typed!r} is no time.", "Choose one of the list.") from error


def _back(request: HttpRequest) -> HttpResponse:
    back = request.POST.get("next", "")
    return redirect(back if url_has_allowed_host_and_scheme(back, allowed_hosts={request.get_host()}) else reverse("alarms"))
