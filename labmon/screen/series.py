"""History of one tap as JSON for the plot: envelope, gaps, limits, alarms, temperature."""

from collections.abc import Sequence
from datetime import UTC, datetime
from typing import Any

from django.http import HttpRequest, HttpResponse, HttpResponseBadRequest, JsonResponse
from django.urls import reverse
from django.utils import timezone
from django.views.decorators.http import require_safe

from ingest.models import Tap, TapKind
from ingest.store.days.faults import known_holes
from labmon.alarms.queries import alarm_spans
from labmon.api.span import Span, parse_span
from labmon.benches.air import air_tap
from labmon.experiments.queries import LimitFacts, VersionRow, limits_of_tap
from labmon.logbook.queries import marks_of
from labmon.screen.door import for_people
from labmon.screen.holes import holes_sentence
from labmon.screen.log_view import MarkView, mark_view
from labmon.screen.named import visible_tap
from labmon.screen.present import time_text
from labmon.screen.quantity import converted_level, quantities_of
from labmon.screen.scaled import SCALES, whole_numbers
from labmon.screen.shown import Shown, gaps_in, history_sentence, shown_history

LEAST_POINTS, USUAL_POINTS, MOST_POINTS = 10, 1000, 4000


@require_safe
@for_people
def history_json(request: HttpRequest, station: str, tap: str) -> HttpResponse:
    """Envelope of ``quantity`` over ``span`` in at most about ``points`` buckets."""
    found = visible_tap(request.user, station, tap)
    quantity = request.GET.get("quantity", "")
    if quantity not in quantities_of(found.kind):
        return _refused(f"quantity: choose one of {', '.join(quantities_of(found.kind))}.")
    try:
        span = parse_span(request.GET.get("span", ""))
        points = min(max(int(request.GET.get("points", USUAL_POINTS)), LEAST_POINTS), MOST_POINTS)
    except ValueError as error:
        return _refused(f"span or points: {error}")
    body = history_body(found, quantity, span, points, timezone.now())
    return JsonResponse(
        body, json_dumps_params={"allow_nan": False, "separators": (",", ":")}, headers={"Cache-Control": "no-store"}
    )


def _refused(why: str) -> HttpResponse:
    return HttpResponseBadRequest(why, content_type="text/plain; charset=utf-8")


def history_body(tap: Tap, quantity: str, span: Span, points: int, now: datetime) -> dict[str, Any]:
    """Everything the plot draws."""
    shown = shown_history(tap, quantity, span, points)
    gaps = gaps_in(shown, tap, span, points, now)
    limits = limit_lines(tap, quantity, span)
    series = _series_body(shown) | {
        "gaps": [[gap.from_ms, gap.until_ms, gap.word] for gap in gaps],
        "limits": limits,
        "alarms": _alarm_lines(tap, quantity, span, limits),
    }
    return {
        "series": series,
        "temperature": _temperature_body(tap, span, points),
        "marks": mark_lines([tap], span),
        "span_ms": [span.from_us / 1e3, span.until_us / 1e3],
        "sentence": history_sentence(shown, gaps) + holes_sentence(known_holes(tap.pk, span.from_us, span.until_us)),
        "now_ms": int(now.timestamp() * 1e3),
    }


def _series_body(shown: Shown) -> dict[str, Any]:
    scale = SCALES[shown.quantity]
    return {
        "quantity": shown.quantity,
        "scale": scale,
        "x0_ms": shown.x0_ms,
        "dx_ms": shown.dx_ms,
        "min": whole_numbers(shown.low, scale),
        "mean": whole_numbers(shown.mean, scale),
        "max": whole_numbers(shown.high, scale),
        "trusted": whole_numbers(shown.trusted_share, 100),
    }


def _temperature_body(tap: Tap, span: Span, points: int) -> dict[str, Any] | None:
    """The tap's own temperature, else its room's; None where nobody measured it."""
    if tap.kind == TapKind.CLIMATE:
        return None
    for source in (tap, air_tap(tap)):
        if source is not None:
            shown = shown_history(source, "temperature_c", span, points)
            if shown.is_known.any():
                return _series_body(shown)
    return None


def mark_lines(taps: Sequence[Tap], span: Span) -> list[dict[str, Any]]:
    """What people wrote of these taps and their benches in the span, for plot and list."""
    return [mark_line(mark_view(mark)) for mark in marks_of(taps, span.from_at, span.until_at)]


def mark_line(mark: MarkView) -> dict[str, Any]:
    """A mark with the address of its entry."""
    href = None if mark.entry_id is None else reverse("log-entry", args=[mark.station, mark.entry_id])
    return {"at_ms": mark.at_ms, "until_ms": mark.until_ms, "word": mark.word, "when": mark.when, "text": mark.text,
            "is_change": mark.is_change, "href": href}


def limit_lines(tap: Tap, quantity: str, span: Span) -> list[dict[str, Any]]:
    """Each limit version that was in force in the span, its levels in the drawn quantity."""
    return [
        line
        for limit in limits_of_tap(tap)
        for line in _lines_of(limit, quantity)
        if line["from_ms"] < span.until_us / 1e3 and (line["until_ms"] is None or line["until_ms"] > span.from_us / 1e3)
    ]


def _lines_of(limit: LimitFacts, quantity: str) -> list[dict[str, Any]]:
    """Versions come newest first: each holds until the one before it in the list began."""
    begins = [_ms(version.valid_from) for version in limit.versions]
    return [
        line
        for version, until_ms in zip(limit.versions, [None, *begins[:-1]], strict=True)
        if not version.is_retired and (line := _line(limit, version, until_ms, quantity)) is not None
    ]


def _line(limit: LimitFacts, version: VersionRow, until_ms: float | None, quantity: str) -> dict[str, Any] | None:
    alarm = converted_level(limit.quantity, version.alarm, quantity)
    if alarm is None:
        return None
    warning = None if version.warning is None else converted_level(limit.quantity, version.warning, quantity)
    return {
        "judged": limit.quantity,
        "from_ms": _ms(version.valid_from),
        "until_ms": until_ms,
        "alarm": alarm,
        "warning": warning,
    }


def _alarm_lines(tap: Tap, quantity: str, span: Span, limits: Sequence[dict[str, Any]]) -> list[dict[str, Any]]:
    """Alarm spans at the height of the level they broke."""
    lines = []
    for raised_us, returned_us, level, judged in alarm_spans(tap.pk, span.from_us, span.until_us):
        from_ms, until_ms = raised_us / 1e3, None if returned_us is None else returned_us / 1e3
        line = next(
            (
                one
                for one in limits
                if one["judged"] == judged
                and one["from_ms"] <= from_ms
                and (one["until_ms"] is None or from_ms < one["until_ms"])
            ),
            None,
        )
        if line is not None:
            height = line["warning"] if level == "warning" and line["warning"] is not None else line["alarm"]
            until = "" if until_ms is None else f" to {_clock(until_ms)}"
            lines.append(
                {
                    "from_ms": from_ms,
                    "until_ms": until_ms,
                    "level": level,
                    "at": height,
                    "word": f"{level} from {_clock(from_ms)}{until}",
                }
            )
    return lines


def _ms(moment: datetime) -> float:
    return moment.timestamp() * 1e3


def _clock(at_ms: float) -> str:
    return time_text(datetime.fromtimestamp(at_ms / 1e3, UTC))
