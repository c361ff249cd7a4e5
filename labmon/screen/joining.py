"""A bench joins: the form for a new station, its slip with the key shown once, and the checklist that ticks itself."""

from datetime import timedelta
from typing import Any

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.views.decorators.cache import never_cache
from django.views.decorators.http import require_http_methods, require_POST, require_safe

from ingest.models import Room, Station
from labmon.benches.actions import add_bench, add_tap, make_bench_key, rotate_bench_key
from labmon.benches.joining import joining_of
from labmon.errors import WriteError
from labmon.people.models import Person
from labmon.people.rights import Action, may, require
from labmon.screen.door import for_people, put_refusal, say_refusal
from labmon.screen.joining_forms import StationForm, TapForm
from labmon.screen.joining_view import joining_view
from labmon.screen.named import visible_station
from labmon.screen.slip_text import KEY_TO_COME, SlipTap, board_text, curl_line, settings_text

READINGS_PATH = "/api/v1/readings"


@require_http_methods(["GET", "HEAD", "POST"])
@never_cache
@for_people
def join_page(request: HttpRequest) -> HttpResponse:
    """The form for a new station; sent, it answers with the slip."""
    require(request.user, Action.ADD_STATION)
    rooms = list(Room.objects.order_by("name").values_list("name", flat=True))
    owners = {one.username: one for one in Person.objects.filter(is_active=True, role__in=("owner", "manager"))}
    form = StationForm(request.POST or None, owners=sorted(owners))
    if request.method == "POST" and form.is_valid():
        typed = form.cleaned_data
        try:
            station, key = add_bench(typed["name"], taps=form.taps(), room=typed["room"], owner=owners.get(typed["owner"]),
                                     purpose=typed["purpose"], by=request.user)
        except WriteError as error:
            put_refusal(form, error)
        else:
            return _slip(request, station, key)
    return render(request, "screen/join.html", {"form": form, "rooms": rooms}, status=422 if request.method == "POST" else 200)


@require_safe
@for_people
def joining_page(request: HttpRequest, station: str) -> HttpResponse:
    """The slip again, without its key."""
    found = visible_station(request.user, station)
    require(request.user, Action.MAKE_STATION_KEY, found)
    return _slip(request, found, "")


@require_POST
@never_cache
@for_people
def make_key(request: HttpRequest, station: str) -> HttpResponse:
    """A new key, shown on this answer and never again; with ``overlap_h`` the keys before it end after so many hours."""
    found = visible_station(request.user, station)
    require(request.user, Action.MAKE_STATION_KEY, found)
    overlap = request.POST.get("overlap_h", "").strip().replace(",", ".")
    try:
        if overlap:
            _, key = rotate_bench_key(found, overlap=timedelta(hours=_hours(overlap)), by=request.user)
        else:
            _, key = make_bench_key(found, by=request.user)
    except WriteError as error:
        say_refusal(request, error)
        return redirect("station", station=found.name)
    return _slip(request, found, key)


@require_POST
@for_people
def add_tap_page(request: HttpRequest, station: str) -> HttpResponse:
    """One more tap of a station, from its slip."""
    found = visible_station(request.user, station)
    require(request.user, Action.ADD_TAP, found)
    form = TapForm(request.POST)
    if form.is_valid():
        try:
            tap = add_tap(found, form.tap(), by=request.user)
        except WriteError as error:
            put_refusal(form, error, {"tap": "name"})
        else:
            messages.success(request, f"Tap {tap.name} is added. Readings of it are taken at once.")
            return redirect("joining", station=found.name)
    return _slip(request, found, "", tap_form=form, status=422)


def _hours(text: str) -> float:
    try:
        hours = float(text)
    except ValueError:
        hours = -1.0
    if not 0.0 <= hours <= 1e6:
        raise WriteError("overlap_h", f"{text!r} is no number of hours.", "Give hours, for example 24.")
    return hours


def _slip(
    request: HttpRequest, station: Station, key: str, *, tap_form: TapForm | None = None, status: int = 200
) -> HttpResponse:
    joining = joining_of(station)
    address = request.build_absolute_uri(READINGS_PATH)
    taps = [SlipTap(tap.name, tap.kind, tap.interval_s) for tap in station.taps.order_by("pk")]
    shown: dict[str, Any] = {
        "station": station, "view": joining_view(joining), "key": key, "address": address,
        "may_add_tap": may(request.user, Action.ADD_TAP, station), "tap_form": tap_form or TapForm(),
    }
    if taps:
        told = key or KEY_TO_COME
        shown |= {
            "settings": settings_text(taps, door=address.removesuffix(READINGS_PATH)),
            "curl": curl_line(taps[0], address=address, key=told),
            "board": board_text(taps[0], address=address, key=told),
            "first": taps[0].name,
        }
    return render(request, "screen/slip.html", shown, status=status)
