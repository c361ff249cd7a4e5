"""Drills: begin one, and see each step's time and which one failed."""

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.utils import timezone
from django.views.decorators.http import require_http_methods

from labmon.drills.actions import begin_drill
from labmon.drills.queries import drill_rows
from labmon.errors import WriteError
from labmon.events.queries import people_to_call
from labmon.people.rights import Action, require
from labmon.screen.door import for_people, say_refusal
from labmon.screen.drill_view import drill_view, drills_sentence


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def drills_page(request: HttpRequest) -> HttpResponse:
    """The drills so far, and the form for one now."""
    require(request.user, Action.SET_CALLS)
    people = {one.username: one for one in people_to_call()}
    if request.method == "POST":
        try:
            drill = begin_drill(people.get(request.POST.get("person", "")) or request.user, by=request.user)
        except WriteError as error:
            say_refusal(request, error)
        else:
            messages.success(request, f"The drill of {drill.person_name} begins within some seconds.")
        return redirect("drills")
    rows, now = drill_rows(), timezone.now()
    return render(
        request,
        "screen/drills.html",
        {"sentence": drills_sentence(rows, now), "drills": [drill_view(row, now) for row in rows], "people": list(people)},
    )
