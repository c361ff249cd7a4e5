"""The gain of two ports by exchange of the polarizations: name two stretches, look at the proposal, enter it."""

from django import forms
from django.contrib import messages
from django.http import Http404, HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.views.decorators.http import require_http_methods

from ingest.models import TapKind
from labmon.benches.gains import GainTaking, enter_gain, gain_taking
from labmon.benches.zeros import Stretch
from labmon.errors import WriteError
from labmon.people.rights import Action, require
from labmon.screen.door import for_people, put_refusal
from labmon.screen.forms import Number
from labmon.screen.named import visible_tap
from labmon.screen.present import er_text, number_text


class GainForm(forms.Form):
    """Two stretches."""

    straight = forms.DateTimeField(label="Light in its wanted port from (UTC)", help_text="e.g. 2031-03-04 02:00:10")
    exchanged = forms.DateTimeField(label="Light turned by 90° from (UTC)", help_text="e.g. 2031-03-04 02:01:30")
    seconds = Number(label="Each for, s", initial=30, min_value=1, max_value=3600)

    def stretches(self) -> tuple[Stretch, Stretch]:
        """What was typed."""
        typed = self.cleaned_data
        return Stretch(typed["straight"], typed["seconds"]), Stretch(typed["exchanged"], typed["seconds"])


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def gain_page(request: HttpRequest, station: str, tap: str) -> HttpResponse:
    """The form; *look* shows what the stretches give, *enter* makes a version of it."""
    found = visible_tap(request.user, station, tap)
    require(request.user, Action.CALIBRATE, found)
    if found.kind != TapKind.TWO_PORT:
        raise Http404("This tap has no gain of two ports.")
    form, sentence = GainForm(request.POST or None), ""
    if request.method == "POST" and form.is_valid():
        try:
            if request.POST.get("act") == "enter":
                version = enter_gain(found, *form.stretches(), by=request.user)
                messages.success(request, f"The gain of {station}/{tap} is {version.gain_ratio:.5g} from the earlier stretch on.")
                return redirect("calibration", station=station, tap=tap)
            sentence = gain_words(f"{station}/{tap}", gain_taking(found, *form.stretches()))
        except WriteError as error:
            put_refusal(form, error)
    shown = {"station": found.station, "tap": found, "form": form, "sentence": sentence}
    return render(request, "screen/gain.html", shown, status=422 if form.errors else 200)


def gain_words(name: str, taking: GainTaking) -> str:
    """One sentence: the gain, its error, what it was, and the ER that is free of it."""
    return (f"Port 1 of {name} reads {taking.gain_ratio:.5g} ± {taking.sigma:.1g} times what port 2 does "
            f"(so far {taking.before:.5g}); the extinction ratio, free of any gain, "
            f"is {er_text(taking.er_db)} ± {number_text(taking.er_sigma_db, 2)}.")
