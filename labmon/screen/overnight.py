"""All benches over a night, worst first."""

from datetime import date, timedelta

from django.conf import settings
from django.http import Http404, HttpRequest, HttpResponse
from django.shortcuts import render
from django.utils import timezone
from django.utils.safestring import mark_safe
from django.views.decorators.http import require_safe

from labmon.overnight.nights import HOURS, last_night, night_of
from labmon.overnight.queries import bench_nights
from labmon.overnight.words import clock, night_sentence
from labmon.screen.door import for_people
from labmon.screen.overnight_view import bench_view
from labmon.screen.present import time_text


@require_safe
@for_people
def overnight_page(request: HttpRequest) -> HttpResponse:
    """The last night, or that of the evening of ``date``."""
    day = request.GET.get("date", "")
    zone, now = settings.LAB_ZONE, timezone.now()
    newest = last_night(now, zone, HOURS)
    night = night_of(_date(day), zone, HOURS) if day else newest
    rows = bench_nights(request.user, night)
    views = [bench_view(row, night, zone) for row in rows]
    following = night.date + timedelta(days=1)
    return render(request, "screen/overnight.html", {
        "sentence": night_sentence(night, rows), "night": night, "zone": zone.key, "is_running": night.until_at > now,
        "from_clock": clock(night.from_at, zone), "until_clock": clock(night.until_at, zone),
        "from_utc": time_text(night.from_at), "until_utc": time_text(night.until_at),
        "benches": [(view, mark_safe(view.profile)) for view in views],  # our own shapes; names in them are escaped
        "before": str(night.date - timedelta(days=1)), "after": str(following) if following <= newest.date else ""})


def _date(text: str) -> date:
    try:
        found = date.fromisoformat(text)
    except ValueError:
        raise Http404("Write the date of the evening as 2031-03-04.") from None
    if not 1971 <= found.year <= 2198:
        raise Http404("There are no readings of that year.")
    return found
