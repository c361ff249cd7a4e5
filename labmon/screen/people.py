"""People and their roles: managers only."""

from dataclasses import dataclass

from django.contrib import messages
from django.http import HttpRequest, HttpResponse, QueryDict
from django.shortcuts import get_object_or_404, redirect, render
from django.views.decorators.http import require_http_methods, require_POST

from labmon.errors import WriteError
from labmon.people.actions import add_person, set_role
from labmon.people.holdings import Holding, HoldingKind, holdings_of, may_take
from labmon.people.leaving import leave
from labmon.people.models import Person, Role
from labmon.people.rights import Action, require, stations_visible_to
from labmon.screen.door import for_people, put_refusal, say_refusal
from labmon.screen.forms import PersonForm

KIND_WORDS = {
    HoldingKind.BENCH: "Bench",
    HoldingKind.EXPERIMENT: "Experiment",
    HoldingKind.RUN: "Run",
    HoldingKind.DEPUTY: "Deputy in the run",
    HoldingKind.ON_CALL: "On call",
}


@dataclass(frozen=True, slots=True)
class HoldingView:
    """One thing to be passed on, and who could take it."""

    held: Holding
    kind: str
    names: list[str]
    chosen: str


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


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def end_access_page(request: HttpRequest, person_id: int) -> HttpResponse:
    """Someone leaves: what hangs on them, to whom it goes, and then the end of their access."""
    require(request.user, Action.MANAGE_PEOPLE)
    person = get_object_or_404(Person, pk=person_id, is_active=True)
    held = holdings_of(person)
    others = list(Person.objects.filter(is_active=True).exclude(pk=person.pk).order_by("username"))
    refusal = None
    if request.method == "POST":
        try:
            leave(person, _chosen(request.POST, held, others), by=request.user, reason=request.POST.get("reason", "")[:500])
        except WriteError as error:
            refusal = error
        else:
            messages.success(request, f"The access of {person.username} has ended."
                             + (f" {len(held)} things were passed on." if held else ""))
            return redirect("people")
    stations = [bench.station.name for bench in person.benches.select_related("station").order_by("station__name")]
    choices = [
        HoldingView(one, KIND_WORDS[one.kind], [other.username for other in others if may_take(other, one.kind)],
                    request.POST.get(one.key, ""))
        for one in held
    ]
    return render(
        request,
        "screen/leave.html",
        {"person": person, "held": choices, "refusal": refusal, "others": [one.username for one in others], "stations": stations,
         "reason": request.POST.get("reason", ""), "keys": person.keys.filter(revoked_at=None).count()},
        status=422 if refusal else 200,
    )


def _chosen(typed: QueryDict, held: list[Holding], others: list[Person]) -> dict[str, Person]:
    """Who takes what; ``all`` stands for those that were left open."""
    by_name = {person.username: person for person in others}
    named = {one.key: typed.get(one.key) or typed.get("all", "") for one in held}
    return {key: by_name[name] for key, name in named.items() if name in by_name}
