"""How oneself is told: on which devices, and when not."""

from django.contrib import messages
from django.http import Http404, HttpRequest, HttpResponse, JsonResponse
from django.shortcuts import redirect, render
from django.views.decorators.http import require_http_methods, require_POST, require_safe

from labmon.errors import WriteError
from labmon.events.actions import set_quiet_hours
from labmon.overnight.actions import set_digest, wants_digest
from labmon.people.rights import Action, require
from labmon.screen.call_forms import QuietHoursForm
from labmon.screen.door import for_people, put_refusal
from labmon.tell.actions import add_device, end_device, send_trial
from labmon.tell.queries import devices_of, push_key, quiet_hours_of


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def telling_page(request: HttpRequest) -> HttpResponse:
    """One's devices and quiet hours."""
    hours = quiet_hours_of(request.user)
    typed = {} if hours is None else {
        "from_minute": _clock(hours.from_minute), "until_minute": _clock(hours.until_minute), "zone": hours.zone
    }
    form = QuietHoursForm(request.POST or None, initial=typed)
    if request.method == "POST" and form.is_valid():
        try:
            _set_hours(request, form)
        except WriteError as error:
            put_refusal(form, error, {"from": "from_minute"})
        else:
            messages.success(request, "Kept. Runs of your own, and times on call, call you all the same.")
            return redirect("telling")
    devices = devices_of(request.user)
    return render(
        request,
        "screen/telling.html",
        {
            "form": form,
            "sentence": _sentence(request, sum(one.ended_at is None for one in devices)),
            "devices": devices,
            "push_key": push_key(),
            "wants_digest": wants_digest(request.user),
        },
        status=422 if request.method == "POST" else 200,
    )


def _clock(minute: int) -> str:
    return f"{minute // 60:02d}:{minute % 60:02d}"


def _sentence(request: HttpRequest, devices: int) -> str:
    ways = [f"by mail to {request.user.email}"] if request.user.email else []
    ways += [f"on {devices} {'browser' if devices == 1 else 'browsers'}"] if devices else []
    if not ways:
        return "Nobody can reach you: you have no mail address here and no browser."
    return f"You are told {' and '.join(ways)}."


def _set_hours(request: HttpRequest, form: QuietHoursForm) -> None:
    first, last = form.cleaned_data["from_minute"], form.cleaned_data["until_minute"]
    if (first is None) != (last is None):
        raise WriteError("from", "Only one of the two times is given.", "Give both, or leave both empty.")
    span = None if first is None else (first, last)
    set_quiet_hours(request.user, span, form.cleaned_data["zone"].strip() or "UTC", by=request.user)


@require_POST
@for_people
def add_device_view(request: HttpRequest) -> JsonResponse:
    """A browser's subscription, sent by its script."""
    require(request.user, Action.MAKE_OWN_KEY)
    wanted = {name: request.POST.get(name, "") for name in ("endpoint", "p256dh", "auth", "name")}
    try:
        device = add_device(request.user, **wanted)
    except WriteError as error:
        return JsonResponse({"why": error.why, "do": error.do}, status=422)
    return JsonResponse({"id": device.pk})


@require_POST
@for_people
def end_device_view(request: HttpRequest, device_id: int) -> HttpResponse:
    """Tell nothing more to one of one's browsers."""
    if device_id not in {one.pk for one in devices_of(request.user)}:
        raise Http404("You have no such device.")
    end_device(device_id, by=request.user)
    messages.success(request, "You are not told there any more.")
    return redirect("telling")


@require_POST
@for_people
def digest_view(request: HttpRequest) -> HttpResponse:
    """Every night by mail, or no longer."""
    require(request.user, Action.MAKE_OWN_KEY)
    is_wanted = request.POST.get("wanted") == "yes"
    set_digest(request.user, is_wanted=is_wanted, by=request.user)
    messages.success(request, "The night comes by mail every morning." if is_wanted else "No more mornings' mails.")
    return redirect("telling")


@require_POST
@for_people
def trial_view(request: HttpRequest) -> HttpResponse:
    """A message to oneself on every channel."""
    require(request.user, Action.MAKE_OWN_KEY)
    send_trial(request.user)
    messages.success(request, "A trial is on its way to all your channels; it should be there within some seconds.")
    return redirect("telling")


@require_safe
def notify_worker(request: HttpRequest) -> HttpResponse:
    """The service worker, from the root of our own origin, so that a tap on a notification may open any page of it."""
    from django.contrib.staticfiles import finders

    path = finders.find("labmon/js/notify-worker.js")
    with open(path, encoding="utf-8") as file:
        return HttpResponse(file.read(), content_type="text/javascript", headers={"Cache-Control": "no-cache"})
