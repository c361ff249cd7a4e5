"""People and their roles: managers only."""

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import get_object_or_404, redirect, render
from django.views.decorators.http import require_http_methods, require_POST

from labmon.errors import WriteError
from labmon.people.actions import add_person, end_access, set_role
from labmon.people.models import Person, Role
from labmon.people.rights import Action, require, stations_visible_to
from labmon.screen.door import for_people, put_refusal, say_refusal
from labmon.screen.forms import PersonForm


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def people_page(request: HttpRequest) -> HttpResponse:
    """Who has access and as what; the form for one more."""
    require(request.user, Action.MANAGE_PEOPLE)
    stations = {station.name: station for station in stations_visible_to(request.user).order_by("name")}
    form = PersonForm(request.POST or None, stations=list(stations))
    if request.method == "POST" and form.is_valid():
        typed = form.cleaned_data
        try:
            added = add_person(
                typed["name"],
                typed["role"],
                by=request.user,
                password=typed["password"] or None,
                email=typed["email"],
                guest_until=typed["guest_until"],
                guest_stations=[stations[name] for name in typed["guest_stations"]],
            )
        except WriteError as error:
            put_refusal(form, error)
        else:
            messages.success(request, f"{added.username} is added as {added.role}.")
            return redirect("people")
    people = Person.objects.prefetch_related("guest_stations").order_by("-is_active", "username")
    return render(
        request,
        "screen/people.html",
        {"form": form, "people": people, "roles": Role.values},
        status=422 if request.method == "POST" else 200,
    )


@require_POST
@for_people
def set_role_page(request: HttpRequest, person_id: int) -> HttpResponse:
    """Give someone another role."""
    require(request.user, Action.MANAGE_PEOPLE)
    person = get_object_or_404(Person, pk=person_id)
    try:
        set_role(person, request.POST.get("role", ""), by=request.user, reason=request.POST.get("reason", "")[:500])
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, f"{person.username} is now {request.POST.get('role')}.")
    return redirect("people")


@require_POST
@for_people
def end_access_page(request: HttpRequest, person_id: int) -> HttpResponse:
    """End someone's access: sessions and keys at once."""
    require(request.user, Action.MANAGE_PEOPLE)
    person = get_object_or_404(Person, pk=person_id)
    try:
        end_access(person, by=request.user, reason=request.POST.get("reason", "")[:500])
    except WriteError as error:
        say_refusal(request, error)
    else:
        messages.success(request, f"The access of {person.username} has ended. Benches of theirs need a new owner.")
    return redirect("people")
