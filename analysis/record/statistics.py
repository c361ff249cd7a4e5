"""Statistics of a tap's span from its stored readings, and of whole days kept as one row each."""

import logging
from collections.abc import Mapping, Sequence
from typing import Any, Final

import numpy as np
from django.db import connection
from django.db.models import Exists, OuterRef

from analysis.drift.grid import typical_interval_s
from analysis.drift.tap_statistics import Temperature, tap_statistics
from analysis.models import DayStatistics, DayStatisticsDue
from analysis.record.calibrations import version_at
from analysis.record.reduce_span import find_samples, tap_calibration
from analysis.record.rollup_rows import DAY_US
from analysis.record.statistics_facts import statistics_facts
from analysis.reduce.sample import Reduced
from ingest.models import Tap, TapKind
from ingest.store.read import find_readings
from ingest.times import at_of, rfc3339_of

log = logging.getLogger(__name__)

#: More readings than this are not worked on at once: they would take more than half a GB of memory.
MOST_READINGS: Final = 1_000_000
#: A tap's own temperatures are used if there are so many.
LEAST_TEMPERATURES: Final = 30
#: What statistics hold, None throughout where there are too few readings.
PARTS: Final = (
    "er", "leak", "angle_deg", "power_w", "direction", "speed", "displacement", "allan", "drift_model", "trend",
    "temperature_response", "thermal_arc",
)  # fmt: skip


class TooManyReadings(ValueError):
    """The span holds more readings than are worked on at once."""


def span_statistics(tap: Tap, from_us: int, until_us: int) -> dict[str, Any]:
    """Statistics of the half-open span, as plain values (`statistics_facts`).

    ``is_complete`` is False where raw readings of the span are unreadable or no longer kept. ``why_none`` says why the parts
    are None.
    Raises:
        TooManyReadings: See `MOST_READINGS`.
    """
    stored = stored_count(tap.pk, from_us, until_us)
    if stored > MOST_READINGS:
        raise TooManyReadings(f"The span holds some {stored} readings; {MOST_READINGS} is the most.")
    samples, holes = find_samples(tap, from_us, until_us)
    facts = _no_readings(tap) | {"readings": len(samples), "is_complete": not holes}
    if len(samples):
        facts |= {"first_at": rfc3339_of(int(samples.at_us[0])), "last_at": rfc3339_of(int(samples.at_us[-1]))}
    if len(samples) < 2:
        return nothing(facts, "Fewer than two readings.")
    temperature, source = _temperature(tap, samples, from_us, until_us)
    wanted = tap_calibration(version_at(tap.pk, at_of(until_us - 1))).wanted_state
    interval_s = typical_interval_s(samples.at_us)
    if not interval_s > 0.0:
        return nothing(facts, "Most readings have the same time as the one before.")
    found = tap_statistics(samples, interval_s=interval_s, temperature=temperature, wanted_state=wanted)
    return facts | {"interval_s": interval_s, "temperature_from": source} | statistics_facts(found)


def nothing(facts: dict[str, Any], why: str) -> dict[str, Any]:
    """Facts without statistics, and why."""
    return facts | dict.fromkeys(PARTS) | {"why_none": why}


def stored_count(tap_id: int, from_us: int, until_us: int) -> int:
    """About how many readings a span holds: all of each stored part that it touches."""
    with connection.cursor() as cursor:
        cursor.execute(
            """SELECT coalesce(sum(count), 0)::bigint FROM (
                 SELECT count FROM ingest_block WHERE tap_id = %(tap)s AND first_at_us < %(until)s AND last_at_us >= %(from)s
                 UNION ALL SELECT count FROM ingest_inboxrow
                   WHERE tap_id = %(tap)s AND first_at_us < %(until)s AND last_at_us >= %(from)s
                 UNION ALL SELECT count FROM ingest_dayfile
                   WHERE tap_id = %(tap)s AND first_at_us < %(until)s AND last_at_us >= %(from)s) AS parts""",
            {"tap": tap_id, "from": from_us, "until": until_us},
        )
        return int(cursor.fetchone()[0])


def _temperature(tap: Tap, samples: Reduced, from_us: int, until_us: int) -> tuple[Temperature | None, str | None]:
    """The tap's own temperatures, else those of its station's first climate tap that has some."""
    if np.isfinite(samples.temperature_c).sum() >= LEAST_TEMPERATURES:
        return Temperature(samples.at_us, samples.temperature_c), tap.name
    for other in Tap.objects.filter(station_id=tap.station_id, kind=TapKind.CLIMATE).order_by("name")[:1]:
        if stored_count(other.pk, from_us, until_us) > MOST_READINGS:
            continue
        found = find_readings(other.pk, from_us, until_us, columns=["temperature_c"]).readings
        values = found.columns.get("temperature_c")
        if values is not None and np.isfinite(values).sum() >= LEAST_TEMPERATURES:
            return Temperature(found.at_us, values), other.name
    return None, None


def is_whole_day(from_us: int, until_us: int) -> bool:
    """True where the span is just one UTC day."""
    return from_us % DAY_US == 0 and until_us - from_us == DAY_US


def stored_day(tap_id: int, day_us: int) -> DayStatistics | None:
    """A day's row, unless it is to be made anew."""
    due = DayStatisticsDue.objects.filter(tap_id=OuterRef("tap_id"), day_us=OuterRef("day_us"))
    return DayStatistics.objects.filter(~Exists(due), tap_id=tap_id, day_us=day_us).first()


def store_day(tap: Tap, day_us: int) -> DayStatistics:
    """Make one closed day's row (anew). A day whose figures cannot be made says why and holds none.

    A row made of more readings than are left (raw no longer kept, or unreadable) stays as it is.
    """
    try:
        facts = span_statistics(tap, day_us, day_us + DAY_US)
    except TooManyReadings as error:
        facts = nothing(_no_readings(tap) | {"readings": stored_count(tap.pk, day_us, day_us + DAY_US)}, str(error))
    except ValueError as error:
        log.exception("day_statistics_failed", extra={"tap_id": tap.pk, "day_us": day_us})
        facts = nothing(_no_readings(tap), f"The figures could not be made: {error}")
    if not facts["is_complete"]:
        known = DayStatistics.objects.filter(tap=tap, day_us=day_us, readings__gt=facts["readings"]).first()
        if known is not None:
            return known
    row, _ = DayStatistics.objects.update_or_create(
        tap=tap, day_us=day_us, defaults={"readings": facts["readings"], "facts": facts}
    )
    return row


def _no_readings(tap: Tap) -> dict[str, Any]:
    return {"readings": 0, "interval_s": tap.interval_s, "is_complete": True, "why_none": "", "first_at": None, "last_at": None,
            "temperature_from": None}


def newest_days(tap_ids: Sequence[int]) -> Mapping[int, DayStatistics]:
    """Each tap's newest day that has readings; one query."""
    rows = DayStatistics.objects.filter(tap_id__in=list(tap_ids), readings__gt=0).order_by("tap_id", "-day_us")
    return {row.tap_id: row for row in rows.distinct("tap_id")}
