"""The call review: a week of calls, whom they woke, and what raised most of them."""

from datetime import UTC, datetime, time, timedelta

from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.utils import timezone
from django.views.decorators.http import require_safe

from labmon.errors import NotAllowed
from labmon.people.models import Role
from labmon.people.rights import role_of
from labmon.review.queries import week_of_calls
from labmon.screen.call_review_view import PUBLISHED_NOTE, calls_view, earlier_and_later, monday_named, monday_of, week_name
from labmon.screen.door import for_people


@require_safe
@for_people
def call_review_page(request: HttpRequest) -> HttpResponse:
    """The week in the address, else the one that is under way."""
    role = role_of(request.user)
    if role is Role.GUEST:
        raise NotAllowed("You may not look at the call review. It is about who was called when.")
    now = timezone.now()
    this_monday = monday_of(now.astimezone(UTC))
    named = monday_named(request.GET.get("week", ""))
    monday = this_monday if named is None else min(datetime.combine(named, time(), UTC), this_monday)
    until_at = min(monday + timedelta(days=7), now)
    view = calls_view(week_of_calls(monday, until_at), until_at, reader_id=request.user.pk, sees_names=role is Role.MANAGER)
    return render(
        request,
        "screen/call_review.html",
        {
            "view": view,
            "week": week_name(monday),
            "monday": monday,
            "until": until_at,
            "is_running": monday == this_monday,
            "ways": earlier_and_later(monday, this_monday),
            "fault": bool(request.GET.get("week")) and named is None,
            "note": PUBLISHED_NOTE,
        },
    )
