"""A bench's lab floors: everyone sees them, a manager sets, lowers and lifts them."""

from dataclasses import dataclass

from django.contrib import messages
from django.db.models import Q
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.views.decorators.http import require_http_methods

from labmon.errors import WriteError
from labmon.experiments.floors import limits_beyond, newest_floors, set_floor
from labmon.experiments.models import LimitFloor
from labmon.people.rights import Action, may, require
from labmon.screen.door import for_people, put_refusal
from labmon.screen.forms import FloorForm
from labmon.screen.level_words import NAMES, both_units
from labmon.screen.named import visible_station
from labmon.screen.present import count_text, time_text


@dataclass(frozen=True, slots=True, kw_only=True)
class FloorView:
    """A floor in words, and limits in force that ask for less (experiment id, name, level)."""

    tap: str
    words: str
    since: str
    set_by: str
    reason: str
    beyond: list[tuple[int, str, str]]


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def floors_page(request: HttpRequest, station: str) -> HttpResponse:
    """The floors of a bench; managers change them here."""
    found = visible_station(request.user, station)
    taps = {tap.name: tap for tap in found.taps.exclude(kind="climate").order_by("name")}
    may_set = may(request.user, Action.SET_FLOOR, found)
    form = FloorForm(request.POST or None, taps=list(taps)) if may_set else None
    if request.method == "POST":
        require(request.user, Action.SET_FLOOR, found)
        if form is not None and form.is_valid():
            typed = form.cleaned_data
            try:
                made = set_floor(found, typed["quantity"], typed["value"], by=request.user, reason=typed["reason"],
                                 tap=taps.get(typed["tap"]))
            except WriteError as error:
                put_refusal(form, error)
            else:
                messages.success(request, "The floor is lifted." if made.value is None else "The floor holds from now on.")
                return redirect("floors", station=found.name)
    floors = [floor_view(row) for row in newest_floors(Q(station=found)) if row.value is not None]
    sentence = (f"{found.name} has {count_text(len(floors), 'lab floor')}: no limit may ask for less." if floors
                else f"{found.name} has no lab floor: its owner may set any limit.")
    return render(request, "screen/floors.html", {"station": found, "floors": floors, "form": form, "sentence": sentence},
                  status=422 if request.method == "POST" else 200)


def floor_view(row: LimitFloor) -> FloorView:
    """A floor in words."""
    beyond = [
        (one.limit.experiment_id, one.limit.experiment.name, both_units(row.quantity, one.alarm)) for one in limits_beyond(row)
    ]
    return FloorView(
        tap=row.tap.name if row.tap else "all taps",
        words=f"{NAMES[row.quantity]} {both_units(row.quantity, row.value)}",
        since=time_text(row.set_at),
        set_by=row.set_by.username if row.set_by else "the command line",
        reason=row.reason,
        beyond=beyond,
    )
