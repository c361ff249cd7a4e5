"""Two exposures of a two-port tap on a page, for gain and leakage: watch one, exchange the light, watch the other, enter."""

from dataclasses import dataclass
from typing import Any, Protocol
from urllib.parse import urlencode

from django import forms
from django.contrib import messages
from django.http import Http404, HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.utils import timezone

from analysis.models import Calibration
from ingest.models import Tap, TapKind
from ingest.times import rfc3339_of, us_of
from labmon.benches.exposures import exposure
from labmon.benches.zeros import Stretch
from labmon.errors import WriteError
from labmon.people.models import Person
from labmon.people.rights import Action, require
from labmon.screen.door import put_refusal
from labmon.screen.exposure_view import ExposureWords, Proposal, StretchView, stretch_view
from labmon.screen.forms import Number
from labmon.screen.named import visible_tap

USUAL_S = 30.0


class ExposureForm(forms.Form):
    """Two stretches; a page's own form adds to it and names them."""

    straight = forms.DateTimeField(required=False)
    exchanged = forms.DateTimeField(required=False)
    seconds = Number(label="Each for, s", initial=f"{USUAL_S:g}", min_value=1, max_value=3600)

    def options(self) -> dict[str, Any]:
        """What the page's own fields say besides."""
        return {}


class Quantity(Protocol):
    """What two exposures give on one page: words, form, proposal, entry."""

    @property
    def name(self) -> str: ...
    @property
    def words(self) -> ExposureWords: ...
    @property
    def form(self) -> type[ExposureForm]: ...
    def proposal(self, name: str, tap: Tap, first: Stretch, second: Stretch, **options: Any) -> Proposal: ...
    def enter(self, tap: Tap, first: Stretch, second: Stretch, *, by: Person, **options: Any) -> Calibration: ...
    def entered(self, name: str, version: Calibration) -> str: ...


@dataclass(frozen=True, slots=True)
class _Asked:
    """What an address or a form names: none, one or both stretches, and the page's own options."""

    first: Stretch | None
    second: Stretch | None
    seconds: float
    options: dict[str, Any]

    def address(self) -> str:
        parts = {"straight": self.first, "exchanged": self.second}
        said = {name: rfc3339_of(us_of(one.from_at)) for name, one in parts.items() if one is not None}
        options = {name: f"{value:.6g}" for name, value in self.options.items()}
        return urlencode(said | {"seconds": f"{self.seconds:.6g}"} | options)


def exposures_page(request: HttpRequest, station: str, tap: str, quantity: Quantity) -> HttpResponse:
    """The page of one quantity: *watch-first*, *watch-second* and *look* lead on by the address, *enter* makes a version."""
    found = visible_tap(request.user, station, tap)
    require(request.user, Action.CALIBRATE, found)
    if found.kind != TapKind.TWO_PORT:
        raise Http404("This tap has not two ports.")
    said = request.POST if request.method == "POST" else request.GET
    form = quantity.form(said if "seconds" in said else None)
    asked = None
    if form.is_bound and form.is_valid():
        asked = _asked(form)
        if request.method == "POST":
            try:
                return _acted(request, found, quantity, asked)
            except WriteError as error:
                put_refusal(form, error)
                asked = None
    return _page(request, found, quantity, form, asked)


def _asked(form: ExposureForm) -> _Asked:
    typed = form.cleaned_data
    first, second = (Stretch(typed[name], typed["seconds"]) if typed[name] else None for name in ("straight", "exchanged"))
    return _Asked(first, second, typed["seconds"], form.options())


def _acted(request: HttpRequest, tap: Tap, quantity: Quantity, asked: _Asked) -> HttpResponse:
    act, now = request.POST.get("act"), Stretch(timezone.now(), asked.seconds)
    if act == "watch-first":
        asked = _Asked(now, None, asked.seconds, asked.options)
    elif act == "watch-second":
        asked = _Asked(asked.first, now, asked.seconds, asked.options)
    if asked.first is None or (act not in ("watch-first", "watch-second") and asked.second is None):
        raise WriteError("straight", "Two stretches are wanted.", "Say when each began, or watch them now.")
    for one in (asked.first, asked.second):
        if one is not None:
            exposure(tap, one)
    if act == "enter" and asked.second is not None:
        version = quantity.enter(tap, asked.first, asked.second, by=request.user, **asked.options)
        messages.success(request, quantity.entered(f"{tap.station.name}/{tap.name}", version))
        return redirect("calibration", station=tap.station.name, tap=tap.name)
    response = redirect(quantity.name, station=tap.station.name, tap=tap.name)
    response["Location"] += f"?{asked.address()}"
    return response


def _page(request: HttpRequest, tap: Tap, quantity: Quantity, form: ExposureForm, asked: _Asked | None) -> HttpResponse:
    name = f"{tap.station.name}/{tap.name}"
    rows, proposal, sentence, refusal = [], None, quantity.words.begin.format(name=name), ""
    if asked is not None and asked.first is not None:
        try:
            rows = _rows(tap, quantity.words, asked)
            sentence = rows[-1].sentence.format(name=name)
            if asked.second is not None and not rows[-1].is_running:
                proposal = quantity.proposal(name, tap, asked.first, asked.second, **asked.options)
                sentence = proposal.sentence
        except WriteError as error:
            refusal = f"{error.why} {error.do}"
            sentence = f"No {quantity.name} of {name} from this."
    shown = {
        "station": tap.station, "tap": tap, "form": form, "words": quantity.words, "sentence": sentence, "rows": rows,
        "proposal": proposal, "refusal": refusal, "name": quantity.name,
        "second_next": len(rows) == 1 and rows[0].is_sound and not refusal,
        "hidden": _hidden(asked) if asked is not None else [],
    }
    return render(request, "screen/exposures.html", shown, status=422 if form.errors else 200)


def _rows(tap: Tap, words: ExposureWords, asked: _Asked) -> list[StretchView]:
    named = [(words.first, asked.first), (words.second, asked.second)]
    unit = "W" if tap.unit == "dBm" else tap.unit
    return [stretch_view(title, exposure(tap, one), unit) for title, one in named if one is not None]


def _hidden(asked: _Asked) -> list[tuple[str, str]]:
    parts = {"straight": asked.first, "exchanged": asked.second}
    said = [(name, rfc3339_of(us_of(one.from_at))) for name, one in parts.items() if one is not None]
    return [*said, ("seconds", f"{asked.seconds:.6g}"), *((name, f"{value:.6g}") for name, value in asked.options.items())]
