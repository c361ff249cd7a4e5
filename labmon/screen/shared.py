"""What a bench shares with others."""

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.views.decorators.http import require_http_methods

from labmon.benches.actions import set_shared, shared_facts
from labmon.benches.queries import shared_names
from labmon.errors import WriteError
from labmon.people.rights import Action, require
from labmon.screen.call_forms import SharedForm
from labmon.screen.door import for_people, put_refusal
from labmon.screen.named import visible_station


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def shared_page(request: HttpRequest, station: str) -> HttpResponse:
    """Room, laser, logger and network of a bench."""
    found = visible_station(request.user, station)
    require(request.user, Action.SET_SHARED, found)
    form = SharedForm(request.POST or None, initial=shared_facts(found, getattr(found, "bench", None)))
    if request.method == "POST" and form.is_valid():
        try:
            set_shared(found, **form.cleaned_data, by=request.user)
        except WriteError as error:
            put_refusal(form, error)
        else:
            messages.success(request, "Kept. Alarms that start together on what it shares make one call.")
            return redirect("station", station=found.name)
    status = 422 if request.method == "POST" else 200
    return render(request, "screen/shared.html", {"station": found, "form": form, "names": shared_names()}, status=status)
