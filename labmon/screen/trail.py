"""The way of the state of polarization as JSON for the canvas: unit vectors in ten-thousandths, null for a gap."""

from datetime import UTC, datetime
from typing import Any

import numpy as np
from django.http import HttpRequest, HttpResponse, HttpResponseBadRequest, JsonResponse
from django.views.decorators.http import require_safe

from analysis.record.calibrations import version_at
from analysis.record.reduce_span import find_samples
from analysis.reduce.sample import Reduced
from ingest.models import Tap
from labmon.api.span import Span, parse_span
from labmon.screen.door import for_people
from labmon.screen.holes import holes_sentence
from labmon.screen.named import visible_tap
from labmon.screen.present import angle_text, time_text
from labmon.screen.scaled import whole_numbers
from labmon.screen.series import limit_lines

MOST_POINTS = 5000
LONGEST_S = 2 * 86_400
SCALE = 10_000
GAP_INTERVALS = 3.0


@require_safe
@for_people
def trail_json(request: HttpRequest, station: str, tap: str) -> HttpResponse:
    """The trail over ``span``; of a span over two days its last two."""
    found = visible_tap(request.user, station, tap)
    try:
        span = parse_span(request.GET.get("span", ""))
    except ValueError as error:
        return HttpResponseBadRequest(f"span: {error}", content_type="text/plain")
    return JsonResponse(
        trail_body(found, shortened(span)),
        json_dumps_params={"allow_nan": False, "separators": (",", ":")},
        headers={"Cache-Control": "no-store"},
    )


def shortened(span: Span) -> Span:
    """The last ``LONGEST_S`` of a span: a trail needs the raw readings."""
    from datetime import timedelta

    return Span(max(span.from_at, span.until_at - timedelta(seconds=LONGEST_S)), span.until_at)


def trail_body(tap: Tap, span: Span) -> dict[str, Any]:
    """Trail, wanted state, tolerance, and the sentence that says the same without a picture."""
    reduced, holes = find_samples(tap, span.from_us, span.until_us)
    at_us, sop = thinned(reduced)
    calibration = version_at(tap.pk, span.until_at)
    wanted = list(calibration.wanted_state) if calibration and calibration.wanted_state else None
    levels = [line for line in limit_lines(tap, "angle_deg", span) if line["until_ms"] is None]
    tolerance_deg = levels[0]["alarm"] if levels and wanted else None
    columns = {f"s{axis + 1}": whole_numbers(sop[:, axis], SCALE) for axis in range(3)}
    return columns | {
        "scale": SCALE,
        "wanted": wanted or _mean_state(sop),
        "has_wanted": wanted is not None,
        "tolerance_deg": tolerance_deg,
        "span_ms": [span.from_us / 1e3, span.until_us / 1e3],
        "sentence": trail_sentence(reduced, tolerance_deg) + holes_sentence(holes),
    }


def thinned(reduced: Reduced) -> tuple[np.ndarray, np.ndarray]:
    """At most ``MOST_POINTS`` states, each the newest of its share; a row of NaN where time is missing.

    Returns:
        Times, µs, shape (M,); unit vectors, shape (M, 3).
    """
    if reduced.sop is None or len(reduced) == 0:
        return np.empty(0, np.int64), np.empty((0, 3))
    stride = max(1, -(-len(reduced) // MOST_POINTS))
    at_us, sop = reduced.at_us[::stride], reduced.sop[::stride]
    steps = np.diff(at_us)
    if len(steps) == 0:
        return at_us, sop
    holes = np.flatnonzero(steps > GAP_INTERVALS * np.median(steps)) + 1
    return np.insert(at_us, holes, at_us[holes]), np.insert(sop, holes, np.nan, axis=0)


def trail_sentence(reduced: Reduced, tolerance_deg: float | None) -> str:
    """Where the state is, how far it went, and whether it left the limit's circle."""
    angle_deg = np.degrees(reduced.angle_rad)
    known = np.flatnonzero(np.isfinite(angle_deg))
    if len(known) == 0:
        return "No state of polarization with a wanted state to compare in this span."
    last, farthest = known[-1], known[np.argmax(angle_deg[known])]
    said = (
        f"Last {angle_text(float(angle_deg[last]))} from the wanted state; farthest {angle_text(float(angle_deg[farthest]))} "
        f"at {_clock(int(reduced.at_us[farthest]))}"
    )
    if tolerance_deg is None:
        return f"{said}."
    share = float(np.mean(angle_deg[known] > tolerance_deg))
    if share == 0.0:
        return f"{said}; it never left the circle of {angle_text(tolerance_deg)}."
    return f"{said}; {100 * share:.1f}{chr(0xA0)}% of the readings lie outside the circle of {angle_text(tolerance_deg)}."


def _mean_state(sop: np.ndarray) -> list[float]:
    """Without a wanted state the disc is centred on the mean direction."""
    with np.errstate(all="ignore"):
        mean = np.nansum(sop, axis=0) if len(sop) else np.zeros(3)
    length = float(np.linalg.norm(mean))
    return [float(part) / length for part in mean] if length > 0 else [1.0, 0.0, 0.0]


def _clock(at_us: int) -> str:
    return time_text(datetime.fromtimestamp(at_us / 1e6, UTC))
