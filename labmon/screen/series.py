"""History of one tap as JSON for the plot, and as rows for the table: envelope, gaps, limits, alarms, temperature."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

import numpy as np
from django.http import HttpRequest, HttpResponse, HttpResponseBadRequest, JsonResponse
from django.utils import timezone
from django.views.decorators.http import require_safe

from analysis.record.rollups import History, history
from ingest.models import Tap
from labmon.alarms.queries import alarm_spans
from labmon.api.span import Span, parse_span
from labmon.experiments.queries import limits_of_tap
from labmon.screen.air import air_tap
from labmon.screen.door import for_people
from labmon.screen.named import visible_tap
from labmon.screen.present import NO_BREAK, age_text, count_text, number_text, time_text
from labmon.screen.quantity import QUANTITIES, converted_level, quantities_of
from labmon.screen.scaled import SCALES, dbm_of, gaps_of, on_grid, whole_numbers

MOST_POINTS, USUAL_POINTS, TABLE_ROWS = 4000, 1000, 48
HALF = {"microseconds": 500_000}


@dataclass(frozen=True, slots=True, kw_only=True)
class Shown:
    """A history in the unit it is drawn in, on an even grid."""

    quantity: str
    x0_ms: float
    dx_ms: float
    low: np.ndarray
    mean: np.ndarray
    high: np.ndarray
    trusted_share: np.ndarray

    @property
    def is_known(self) -> np.ndarray:
        """True where there is a mean."""
        return np.isfinite(self.mean)


@require_safe
@for_people
def history_json(request: HttpRequest, station: str, tap: str) -> HttpResponse:
    """Envelope of ``quantity`` over ``span`` in at most about ``points`` buckets."""
    found = visible_tap(request.user, station, tap)
    quantity = request.GET.get("quantity", "")
    if quantity not in quantities_of(found.kind):
        return HttpResponseBadRequest(
            f"quantity: choose one of {', '.join(quantities_of(found.kind))}.", content_type="text/plain"
        )
    try:
        span = parse_span(request.GET.get("span", ""))
        points = min(max(int(request.GET.get("points", USUAL_POINTS)), 10), MOST_POINTS)
    except ValueError as error:
        return HttpResponseBadRequest(f"span or points: {error}", content_type="text/plain")
    return JsonResponse(
        history_body(found, quantity, span, points, timezone.now()),
        json_dumps_params={"allow_nan": False, "separators": (",", ":")},
        headers={"Cache-Control": "no-store"},
    )


def history_body(tap: Tap, quantity: str, span: Span, points: int, now: datetime) -> dict[str, Any]:
    """Everything the plot draws."""
    shown = shown_history(tap.pk, quantity, span, points)
    known_until = min(span.until_us, _us(now))
    gaps = clipped_gaps(shown, span.from_us / 1e3, known_until / 1e3)
    limits = limit_lines(tap, quantity, span)
    return {
        "series": _series_body(shown) | {"gaps": gaps, "limits": limits, "alarms": _alarm_lines(tap, quantity, span, limits)},
        "temperature": _temperature_body(tap, span, points),
        "span_ms": [span.from_us / 1e3, span.until_us / 1e3],
        "sentence": history_sentence(shown, gaps),
        "now_ms": int(_us(now) / 1e3),
    }


def shown_history(tap_id: int, quantity: str, span: Span, points: int) -> Shown:
    """Asked of the rollups, put on an even grid; power as dBm."""
    found: History = history(tap_id, quantity, span.from_us, span.until_us, points)
    bucket_us = round(found.bucket_s * 1e6)
    columns = [np.asarray(column, dtype=np.float64) for column in (found.min, found.mean, found.max, found.trusted_share)]
    if quantity == "power_w":
        columns[:3] = [dbm_of(column) for column in columns[:3]]
    first_us, (low, mean, high, trusted) = on_grid(np.asarray(found.at_us, dtype=np.int64), columns, max(bucket_us, 1))
    return Shown(
        quantity=quantity, x0_ms=first_us / 1e3, dx_ms=bucket_us / 1e3, low=low, mean=mean, high=high, trusted_share=trusted
    )


def clipped_gaps(shown: Shown, from_ms: float, until_ms: float) -> list[list[float]]:
    """Time without reading inside the span, up to now, as [from, until] in ms; also before the first and after the last."""
    if not shown.is_known.any():
        return [[from_ms, until_ms]] if until_ms > from_ms else []
    inner = gaps_of(shown.is_known, shown.x0_ms, shown.dx_ms)
    last_ms = shown.x0_ms + len(shown.mean) * shown.dx_ms
    outer = [(from_ms, shown.x0_ms)] * (shown.x0_ms - from_ms > 2 * shown.dx_ms) + [(last_ms, until_ms)] * (
        until_ms - last_ms > 2 * shown.dx_ms
    )
    return sorted(
        [max(start, from_ms), min(end, until_ms)] for start, end in [*inner, *outer] if min(end, until_ms) > max(start, from_ms)
    )


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
    if tap.kind == "climate":
        return None
    for tap_id in (tap.pk, air_tap(tap)):
        if tap_id is None:
            continue
        shown = shown_history(tap_id, "temperature_c", span, points)
        if shown.is_known.any():
            return _series_body(shown)
    return None


def limit_lines(tap: Tap, quantity: str, span: Span) -> list[dict[str, Any]]:
    """Each limit version that was in force in the span, its levels in the drawn quantity."""
    lines = []
    for limit in limits_of_tap(tap):
        levels = [(version, converted_level(limit.quantity, version.alarm, quantity)) for version in limit.versions]
        lines += [
            {
                "from_ms": _us(version.valid_from) / 1e3,
                "until_ms": until_ms,
                "alarm": alarm,
                "warning": None if version.warning is None else converted_level(limit.quantity, version.warning, quantity),
            }
            for (version, alarm), until_ms in zip(
                levels, [None, *(_us(version.valid_from) / 1e3 for version, _ in levels[:-1])], strict=True
            )
            if alarm is not None
            and not version.is_retired
            and _us(version.valid_from) < span.until_us
            and (until_ms is None or until_ms > span.from_us / 1e3)
        ]
    return lines


def _alarm_lines(tap: Tap, quantity: str, span: Span, limits: Sequence[dict[str, Any]]) -> list[dict[str, Any]]:
    """Alarm spans at the height of the level they broke."""
    lines = []
    for raised_us, returned_us, level, judged in alarm_spans(tap.pk, span.from_us, span.until_us):
        from_ms = raised_us / 1e3
        heights = [
            line for line in limits if line["from_ms"] <= from_ms and (line["until_ms"] is None or from_ms < line["until_ms"])
        ]
        if not heights or not judged or converted_level(judged, QUANTITIES[judged].probe, quantity) is None:
            continue
        height = heights[0]["warning"] if level == "warning" and heights[0]["warning"] is not None else heights[0]["alarm"]
        until_ms = None if returned_us is None else returned_us / 1e3
        lines.append(
            {
                "from_ms": from_ms,
                "until_ms": until_ms,
                "level": level,
                "at": height,
                "word": f"{level} from {_clock(from_ms)}" + ("" if until_ms is None else f" to {_clock(until_ms)}"),
            }
        )
    return lines


def history_sentence(shown: Shown, gaps: Sequence[Sequence[float]]) -> str:
    """The history in one sentence."""
    name, unit, places = QUANTITIES[shown.quantity].name, QUANTITIES[shown.quantity].unit, QUANTITIES[shown.quantity].places
    if not shown.is_known.any():
        return "No reading in this span."
    low, high = float(np.nanmin(shown.low)), float(np.nanmax(shown.high))
    said = f"{name} between {number_text(low, places, unit)} and {number_text(high, places, unit)}"
    missing_s = sum(end - start for start, end in gaps) / 1e3
    if gaps:
        said += f"; {count_text(len(gaps), 'gap')} without reading, {age_text(missing_s)} in all"
    return f"{said}.".replace(f"{NO_BREAK}{NO_BREAK}", NO_BREAK)


def history_rows(tap: Tap, quantity: str, span: Span) -> list[tuple[str, str, str, str, str]]:
    """The same as rows of a table: time, lowest, mean, highest, share trusted."""
    shown = shown_history(tap.pk, quantity, span, TABLE_ROWS)
    places = QUANTITIES[quantity].places
    return [
        (
            _clock(shown.x0_ms + index * shown.dx_ms),
            *(number_text(float(column[index]), places) for column in (shown.low, shown.mean, shown.high)),
            number_text(float(shown.trusted_share[index]) * 100, 0, "%"),
        )
        for index in range(len(shown.mean))
    ]


def _us(moment: datetime) -> int:
    return round(moment.timestamp() * 1e6)


def _clock(at_ms: float) -> str:
    return time_text(datetime.fromtimestamp(at_ms / 1e3, UTC))
