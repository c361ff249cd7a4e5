"""Taking a zero on the page: confirm, watch the dark live, look at the proposal, enter it; or take one the past offers."""

from typing import Any
from urllib.parse import urlencode

from django.contrib import messages
from django.http import Http404, HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.utils import timezone
from django.views.decorators.http import require_http_methods

from ingest.models import Tap
from ingest.stamps import parse_stamp
from ingest.store.columns import NO_TIME
from ingest.times import at_of, rfc3339_of, us_of
from labmon.benches.zeros import Stretch, enter_zero, harvested, has_zero, zero_taking
from labmon.errors import WriteError
from labmon.people.rights import Action, require
from labmon.screen.door import for_people, say_refusal
from labmon.screen.named import visible_tap
from labmon.screen.present import age_text, time_text
from labmon.screen.zero_view import stretch_words, zero_view

USUAL_S = 30.0


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def zero_page(request: HttpRequest, station: str, tap: str) -> HttpResponse:
    """Without a stretch: how to begin, and what the past offers. With one: how it goes, and the zero it gives."""
    found = visible_tap(request.user, station, tap)
    require(request.user, Action.CALIBRATE, found)
    if not has_zero(found):
        raise Http404("This tap has no zero.")
    said = request.POST if request.method == "POST" else request.GET
    try:
        if "from" in said:
            return _stretch_page(request, found, _stretch_in(said))
        if request.method == "POST":
            return _begin(request, found)
    except WriteError as error:
        say_refusal(request, error)
        return redirect("zero", station=station, tap=tap)
    stretches = harvested(found)
    shown = {
        "tap": found, "station": found.station, "usual_s": f"{USUAL_S:g}",
        "offers": [(time_text(one.from_at), age_text(one.seconds), address_of(one)) for one in stretches],
        "offered": stretch_words([one.seconds for one in stretches]),
    }
    return render(request, "screen/zero_begin.html", shown)


def address_of(stretch: Stretch) -> str:
    """The query of a stretch's page."""
    return urlencode({"from": rfc3339_of(us_of(stretch.from_at)), "seconds": f"{stretch.seconds:.6g}"})


def _begin(request: HttpRequest, tap: Tap) -> HttpResponse:
    if request.POST.get("is_blocked") != "on":
        raise WriteError("is_blocked", "The beam is not said to be blocked.", "Block it, then tick the box.")
    stretch = Stretch(timezone.now(), _seconds(request.POST.get("seconds", "")))
    zero_taking(tap, stretch)
    response = redirect("zero", station=tap.station.name, tap=tap.name)
    response["Location"] += f"?{address_of(stretch)}"
    return response


def _stretch_page(request: HttpRequest, tap: Tap, stretch: Stretch) -> HttpResponse:
    name = f"{tap.station.name}/{tap.name}"
    if request.method == "POST":
        try:
            enter_zero(tap, stretch, by=request.user, is_blocked=request.POST.get("is_blocked") == "on")
        except WriteError as error:
            say_refusal(request, error)
        else:
            messages.success(request, f"The zero of {name} holds from {time_text(stretch.from_at)}.")
            return redirect("calibration", station=tap.station.name, tap=tap.name)
    unit = "W" if tap.unit == "dBm" else tap.unit
    shown: dict[str, Any] = {
        "tap": tap, "station": tap.station, "view": zero_view(name, zero_taking(tap, stretch), unit),
        "from": rfc3339_of(us_of(stretch.from_at)), "seconds": f"{stretch.seconds:.6g}", "began": time_text(stretch.from_at),
    }
    return render(request, "screen/zero.html", shown, status=422 if request.method == "POST" else 200)


def _stretch_in(said: Any) -> Stretch:
    at_us = parse_stamp(said.get("from", ""))
    if at_us == NO_TIME:
        raise WriteError("from", f"{said.get('from', '')!r} is no time.", "Write it as 2031-03-04T02:00:00Z.")
    return Stretch(at_of(at_us), _seconds(said.get("seconds", "")))


def _seconds(text: str) -> float:
    try:
        return float(text.replace(",", "."))
    except ValueError:
        raise WriteError("seconds", f"{text!r} is no number of seconds.", "Give seconds, for example 30.") from None
