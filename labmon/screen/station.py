"""The station page."""

from typing import Any

from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.utils import timezone
from django.views.decorators.http import require_safe

from analysis.record.statistics import newest_days
from ingest.models import Station
from ingest.times import at_of
from labmon.ahead.queries import ahead_of
from labmon.alarms.queries import alarm_rows
from labmon.benches.queries import StationFacts, station_facts
from labmon.people.rights import Action, may
from labmon.screen.alarm_view import alarm_view
from labmon.screen.door import for_people
from labmon.screen.door_view import door_troubles, door_words
from labmon.screen.drift_view import DriftView, drift_view
from labmon.screen.holds import holds_shown, quiet_choices
from labmon.screen.named import visible_station
from labmon.screen.quantity import QUANTITIES, quantities_of
from labmon.screen.series import mark_lines
from labmon.screen.shown import history_rows
from labmon.screen.span import shown_span, ways
from labmon.screen.station_view import boot_words, clock_words, station_sentence, tap_view
from labmon.screen.trouble_view import clock_course_words, questions, trouble_words

RECENT_ALARMS = 12


@require_safe
@for_people
def station_page(request: HttpRequest, station: str) -> HttpResponse:
    """One bench: how it stands, its alarms, its values, one tap's history, and the facts behind them."""
    found = visible_station(request.user, station)
    facts = station_facts(found)
    now = timezone.now()
    alarms = [alarm_view(row, now) for row in alarm_rows(request.user, station=found.name, limit=RECENT_ALARMS)]
    waiting = [view for view in alarms if view.is_waiting]
    ahead = ahead_of(limit.limit_id for tap in facts.taps for limit in tap.limits)
    return render(
        request,
        "screen/station.html",
        {
            "station": found,
            "facts": facts,
            "sentence": station_sentence(found.name, facts, len(waiting)),
            "taps": [tap_view(tap, now, ahead) for tap in facts.taps],
            "drifts": _drifts(facts),
            "clock": clock_words(facts.boots),
            "troubles": [*door_troubles(facts.door, facts.taps), *trouble_words(facts.troubles, facts.taps, facts.doubts)],
            "door_words": door_words(facts.door, now),
            "questions": questions(facts.doubts),
            "clock_course": clock_course_words(facts.troubles.clock),
            "boots": [boot_words(boot) for boot in facts.boots],
            "waiting": waiting,
            "alarms": [view for view in alarms if not view.is_waiting],
            "tap_ids": " ".join(str(tap.id) for tap in facts.taps),
            "rights": _rights(request, found),
            **holds_shown(request, now, station=found.name),
            **quiet_choices(request, found),
        }
        | _shown(request, facts, found, now),
    )


def _drifts(facts: StationFacts) -> list[DriftView]:
    """How each tap that measures light drifted on its newest whole day; one query."""
    taps = [tap for tap in facts.taps if tap.kind != "climate"]
    days = newest_days([tap.id for tap in taps])
    return [drift_view(tap.id, tap.name, at_of(days[tap.id].day_us) if tap.id in days else None,
                       days[tap.id].facts if tap.id in days else None) for tap in taps]


def _rights(request: HttpRequest, station: Station) -> dict[str, bool]:
    wanted = {
        "acknowledge": Action.ACKNOWLEDGE,
        "calibrate": Action.CALIBRATE,
        "keys": Action.MAKE_STATION_KEY,
        "import": Action.IMPORT_FILE,
        "log": Action.LOG,
        "shared": Action.SET_SHARED,
    }
    return {name: may(request.user, action, station) for name, action in wanted.items()}


def _shown(request: HttpRequest, facts: StationFacts, station: Station, now) -> dict[str, Any]:
    """Which tap, quantity and span the history shows, and its table."""
    if not facts.taps:
        return {"shown": None}
    by_name = {tap.name: tap for tap in facts.taps}
    first_light = next((tap for tap in facts.taps if tap.kind != "climate"), facts.taps[0])
    shown = by_name.get(request.GET.get("tap", ""), first_light)
    choices = quantities_of(shown.kind)
    quantity = request.GET.get("quantity", "")
    quantity = quantity if quantity in choices else choices[0]
    span = shown_span(request.GET.get("span"), now)
    tap = station.taps.get(pk=shown.id)
    is_part = "X-Labmon-Part" in request.headers
    return {
        "shown": shown,
        "quantity": quantity,
        "quantity_name": QUANTITIES[quantity].name,
        "unit": QUANTITIES[quantity].unit,
        "choices": [(name, QUANTITIES[name].name) for name in choices],
        "span": span,
        "ways": ways(span.span, now),
        "rows": [] if is_part else history_rows(tap, quantity, span.span),
        "marks": [] if is_part else mark_lines([tap], span.span),
    }
