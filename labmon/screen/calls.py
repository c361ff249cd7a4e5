"""Who is called: the rota, the lab's rules, and the addresses that are posted every event."""

from datetime import UTC, timedelta

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.utils import timezone
from django.views.decorators.http import require_http_methods, require_POST

from labmon.errors import WriteError
from labmon.events.actions import put_on_call, set_call_rules, take_off_call
from labmon.events.queries import on_call_between, on_call_last, people_to_call
from labmon.events.telling import call_rules
from labmon.people.rights import Action, may, require
from labmon.screen.call_forms import OnCallForm, RulesForm, WebhookForm
from labmon.screen.door import for_people, put_refusal
from labmon.screen.event_view import WEEKDAYS, WEEKS_SHOWN, first_day, on_call_sentence, rota_weeks
from labmon.screen.present import time_text
from labmon.tell.actions import add_webhook, end_webhook
from labmon.tell.queries import webhook_key, webhooks


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def calls_page(request: HttpRequest) -> HttpResponse:
    """Who is on call when, and the form for more."""
    require(request.user, Action.SEE_CALLS)
    if request.method == "POST":
        require(request.user, Action.SET_CALLS)
    people = {one.username: one for one in people_to_call()}
    form = OnCallForm(request.POST or None, people=list(people), initial=_next_week())
    if request.method == "POST" and form.is_valid():
        typed = form.cleaned_data
        try:
            row = put_on_call(
                people[typed["person"]], typed["from_at"].astimezone(UTC), typed["until_at"].astimezone(UTC), by=request.user
            )
        except WriteError as error:
            put_refusal(form, error)
        else:
            messages.success(request, f"{row.person.username} is on call until {time_text(row.until_at)[:16]} UTC.")
            return redirect("calls")
    return _page(request, form=form, status=422 if request.method == "POST" else 200)


def _next_week() -> dict[str, str]:
    """A week from where the rota ends."""
    last, now = on_call_last(), timezone.now()
    begin = last.until_at if last and last.until_at > now else (now + timedelta(hours=1)).replace(minute=0)
    return {"from_at": f"{begin:%Y-%m-%d %H:%M}", "until_at": f"{begin + timedelta(days=7):%Y-%m-%d %H:%M}"}


def _page(request: HttpRequest, *, form=None, rules_form=None, hook_form=None, status: int = 200) -> HttpResponse:
    now, rules = timezone.now(), call_rules()
    begin = first_day(now)
    rota = on_call_between(begin, begin + timedelta(days=7 * WEEKS_SHOWN))
    may_set = may(request.user, Action.SET_CALLS)
    typed = {
        "remind_after_min": f"{rules.remind_after_s / 60:g}",
        "drill_weekday": "" if rules.drill_weekday is None else rules.drill_weekday,
        "drill_hour": rules.drill_hour,
    }
    key_id, key_text = webhook_key() if may_set else ("", "")
    return render(
        request,
        "screen/calls.html",
        {
            "sentence": on_call_sentence(rota, now),
            "weekdays": WEEKDAYS,
            "weeks": rota_weeks(rota, now),
            "coming": [
                (one.pk, one.person.username, time_text(one.from_at)[:16], time_text(one.until_at)[:16])
                for one in rota
                if one.until_at > now
            ],
            "may_set": may_set,
            "remind": f"{rules.remind_after_s / 60:g} min",
            "form": form or OnCallForm(people=[one.username for one in people_to_call()], initial=_next_week()),
            "rules_form": rules_form or RulesForm(initial=typed),
            "hook_form": hook_form or WebhookForm(),
            "hooks": webhooks() if may_set else [],
            "key_id": key_id,
            "key_text": key_text,
        },
        status=status,
    )


@require_POST
@for_people
def off_call(request: HttpRequest) -> HttpResponse:
    """End a time on call, or take out one that has not begun."""
    require(request.user, Action.SET_CALLS)
    take_off_call(_number(request), by=request.user)
    messages.success(request, "Taken out of the rota.")
    return redirect("calls")


@require_POST
@for_people
def set_rules(request: HttpRequest) -> HttpResponse:
    """The lab's rules of calling."""
    require(request.user, Action.SET_CALLS)
    form = RulesForm(request.POST)
    if form.is_valid():
        typed = form.cleaned_data
        day = typed["drill_weekday"]
        try:
            set_call_rules(
                remind_after_s=typed["remind_after_min"] * 60.0,
                drill_weekday=int(day) if day else None,
                drill_hour=typed["drill_hour"],
                by=request.user,
            )
        except WriteError as error:
            put_refusal(form, error, {"remind_after": "remind_after_min"})
        else:
            messages.success(request, "The rules hold from now on.")
            return redirect("calls")
    return _page(request, rules_form=form, status=422)


@require_POST
@for_people
def new_webhook(request: HttpRequest) -> HttpResponse:
    """An address that is posted every event."""
    require(request.user, Action.SET_CALLS)
    form = WebhookForm(request.POST)
    if form.is_valid():
        try:
            hook = add_webhook(form.cleaned_data["name"], form.cleaned_data["url"], by=request.user)
        except WriteError as error:
            put_refusal(form, error)
        else:
            messages.success(request, f"{hook.name} is posted every event from now on.")
            return redirect("calls")
    return _page(request, hook_form=form, status=422)


@require_POST
@for_people
def no_webhook(request: HttpRequest) -> HttpResponse:
    """Post nothing more to an address."""
    require(request.user, Action.SET_CALLS)
    number = _number(request)
    if number in {one.pk for one in webhooks()}:
        end_webhook(number, by=request.user)
        messages.success(request, "Nothing more is posted to it.")
    return redirect("calls")


def _number(request: HttpRequest) -> int:
    """The row that a button of the page is about; 0, which is none, where somebody else wrote the form."""
    text = request.POST.get("id", "")
    return int(text) if text.isdecimal() and len(text) < 19 else 0
