"""What a span of one tap tells: leak, angle, Allan deviations, drift model, temperature, each with its uncertainty."""

from datetime import timedelta
from http import HTTPStatus
from typing import Any

from django.http import HttpRequest, HttpResponse

from analysis.record.statistics import TooManyReadings, is_whole_day, span_statistics, stored_day
from ingest.models import Tap, TapKind
from labmon.api.answer import json_answer
from labmon.api.named import tap_named, tap_path
from labmon.api.problem import Problem, wrong_field
from labmon.api.query import known_only, span_of
from labmon.api.span import Span
from labmon.api.times import rfc3339
from labmon.people.models import Person

LONGEST = timedelta(days=8)


def get_statistics(request: HttpRequest, person: Person, station: str, tap: str) -> HttpResponse:
    """Statistics of a span of at most 8 days; a whole closed UTC day is answered from its stored row."""
    known_only(request.GET, "span")
    span = span_of(request.GET)
    if span.until_at - span.from_at > LONGEST:
        raise wrong_field("span", "The span is too long for statistics.",
                          f"Ask for at most {LONGEST.days} days; whole days (T00:00:00Z/P1D) are kept for as long as the tap is.")
    row = tap_named(person, station, tap)
    if row.kind == TapKind.CLIMATE:
        raise wrong_field("tap", "A climate tap has no statistics of polarization.", "Choose a tap that measures light.")
    facts, made_at = _facts(row, span)
    return json_answer({"tap": tap_path(row), "kind": row.kind, "span": str(span), "made_at": made_at} | facts)


def _facts(tap: Tap, span: Span) -> tuple[dict[str, Any], str | None]:
    """The figures, and when the stored row was made; None where they were made now."""
    if is_whole_day(span.from_us, span.until_us) and (kept := stored_day(tap.pk, span.from_us)) is not None:
        return kept.facts, rfc3339(kept.made_at)
    try:
        return span_statistics(tap, span.from_us, span.until_us), None
    except TooManyReadings as error:
        raise wrong_field("span", "The span holds too many readings.", f"{error} Ask for a shorter span.") from None
    except ValueError as error:
        raise Problem(HTTPStatus.CONFLICT, "The figures of this span could not be made.", f"{error}", field="span") from None
