"""One event: its alarms, who was told, who takes it."""

from django.contrib import messages
from django.http import HttpRequest, HttpResponse
from django.shortcuts import get_object_or_404, redirect, render
from django.utils import timezone
from django.views.decorators.http import require_POST, require_safe

from labmon.events.actions import take_event
from labmon.events.queries import event_page, events_visible_to
from labmon.people.models import Role
from labmon.people.rights import Action, may, require, role_of
from labmon.screen.alarm_view import alarm_view
from labmon.screen.door import for_people
from labmon.screen.event_view import calm_words, event_title, message_view, next_words, taken_words, where_to_look
from labmon.screen.present import count_text
from labmon.tell.queries import messages_of


@require_safe
@for_people
def event_page_view(request: HttpRequest, event_id: int) -> HttpResponse:
    """What happened, who has it, who was told; the link of every call leads here."""
    event = get_object_or_404(events_visible_to(request.user).select_related("taken_by"), pk=event_id)
    page, now = event_page(event, request.user), timezone.now()
    views = [alarm_view(row, now) for row in page.alarms]
    waiting = [view for view in views if view.is_waiting]
    is_guest = role_of(request.user) is Role.GUEST
    return render(
        request,
        "screen/event.html",
        {
            "event": event,
            "sentence": event_title(page),
            "look": where_to_look(page),
            "calm": calm_words(page),
            "taken": taken_words(page),
            "next": next_words(page, now) if waiting else "",
            "alarms": views,
            "waiting_count": count_text(len(waiting), "alarm") if waiting else "",
            "may_take": bool(waiting) and may(request.user, Action.ACKNOWLEDGE),
            "told": [] if is_guest else [message_view(row, now) for row in messages_of(event.pk)],
            "is_guest": is_guest,
        },
    )


@require_POST
@for_people
def take_event_view(request: HttpRequest, event_id: int) -> HttpResponse:
    """Say "I have it": all its alarms are acknowledged, the others hear of it."""
    event = get_object_or_404(events_visible_to(request.user), pk=event_id)
    require(request.user, Action.ACKNOWLEDGE)
    taken = take_event(event.pk, by=request.user, note=request.POST.get("note", ""))
    if taken:
        count = count_text(len(taken), "alarm")
        messages.success(request, f"You have it: {count} acknowledged. Whoever else was told hears of it.")
    else:
        messages.info(request, "Somebody was faster: there was nothing left to take.")
    return redirect("event", event_id=event.pk)
