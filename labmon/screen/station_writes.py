"""Writes from the station page: keys and calibrations."""

from datetime import UTC

from django.contrib import messages
from django.http import Http404, HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.utils import timezone
from django.views.decorators.http import require_http_methods, require_POST

from analysis.models import Doubt
from analysis.record.calibrations import version_at
from ingest.store.read import newest_readings
from labmon.benches.actions import revoke_bench_key
from labmon.benches.calibration import calibration_history, set_calibration
from labmon.benches.ceilings import READINGS_LOOKED_AT, ceiling_of
from labmon.benches.doubts import answer_doubt
from labmon.benches.zeros import being_made_anew, has_zero
from labmon.errors import WriteError
from labmon.people.rights import Action, require
from labmon.screen.door import for_people, put_refusal, say_refusal
from labmon.screen.forms import CalibrationForm
from labmon.screen.named import visible_station, visible_tap
from labmon.screen.present import time_text
from labmon.screen.zero_view import ceiling_words, due_words, version_words


@require_POST
@for_people
def revoke_key(request: HttpRequest, station: str, key_id: int) -> HttpResponse:
    """End a key of this station now."""
    found = visible_station(request.user, station)
    require(request.user, Action.MAKE_STATION_KEY, found)
    if not found.keys.filter(pk=key_id).exists():
        raise Http404("This station has no such key.")
    try:
        revoke_bench_key(key_id, by=request.user)
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, "The key is revoked. Readings sent with it are refused from now on.")
    return redirect("station", station=found.name)


@require_POST
@for_people
def answer_doubts(request: HttpRequest, station: str) -> HttpResponse:
    """A person's word on new firmware, or on ports that exchanged their light."""
    found = visible_station(request.user, station)
    require(request.user, Action.CALIBRATE, found)
    asked = Doubt.objects.filter(tap__station=found, pk__in=[one for one in request.POST.getlist("doubt") if one.isdecimal()])
    try:
        for doubt in asked.order_by("pk"):
            answer_doubt(doubt.pk, request.POST.get("answer", ""), by=request.user)
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, "Thank you: it is noted, and what was derived since then is made anew.")
    return redirect("station", station=found.name)


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def calibration_page(request: HttpRequest, station: str, tap: str) -> HttpResponse:
    """The versions of a tap's calibration, and the form for a new one."""
    found = visible_tap(request.user, station, tap)
    require(request.user, Action.CALIBRATE, found)
    initial = {"valid_from": timezone.now().strftime("%Y-%m-%d %H:%M")}
    form = CalibrationForm(request.POST or None, kind=found.kind, initial=initial)
    if request.method == "POST" and form.is_valid():
        try:
            set_calibration(
                found,
                form.cleaned_data["valid_from"].astimezone(UTC),
                form.changes(),
                by=request.user,
                reason=form.cleaned_data["reason"],
            )
        except WriteError as error:
            put_refusal(form, error)
        else:
            messages.success(
                request, f"The new calibration of {station}/{tap} holds from {time_text(form.cleaned_data['valid_from'])}."
            )
            return redirect("station", station=station)
    status = 422 if request.method == "POST" else 200
    newest = newest_readings([found.pk], count=READINGS_LOOKED_AT)[found.pk]
    due = being_made_anew(found)
    unit = "W" if found.unit == "dBm" else found.unit
    ceiling = ceiling_words(ceiling_of(found, version_at(found.pk, timezone.now()), newest))
    return render(
        request,
        "screen/calibration.html",
        {
            "station": found.station,
            "tap": found,
            "form": form,
            "sentence": f"{station}/{tap}: {ceiling[:1].lower() + ceiling[1:]}" if ceiling else f"Calibration of {station}/{tap}",
            "due": due_words(due),
            "due_percent": due.percent,
            "has_zero": has_zero(found),
            "versions": [version_words(one, unit) for one in calibration_history(found)],
            "unit": unit,
        },
        status=status,
    )
