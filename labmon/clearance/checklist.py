"""What to look at before a run, told from stored data alone: each point in words, with what to do."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from enum import StrEnum
from typing import Final

from analysis.record.calibrations import version_at
from analysis.record.reduce_span import OLD_ZERO_AFTER
from ingest.models import Station, StationBoot, Tap, TapHeard, TapKind
from ingest.times import SECOND_US, us_of
from labmon.alarms.words import span_text
from labmon.benches.pace import interval_of
from labmon.benches.queries import silences_now
from labmon.benches.show import Silence
from labmon.benches.troubles import troubles_of
from labmon.drills.models import Drill

#: Readings that arrive later than this after they were taken come out of a station's spool.
LATE_US: Final = 120 * SECOND_US
#: Unheard for so long is no sign of life, even where no door was up to hear it.
LONG_UNHEARD_S: Final = 3600.0
#: A proof of the call chain older than this is old (common practice, no source).
PROOF_HOLDS: Final = timedelta(days=30)


class Standing(StrEnum):
    """How a point of the list stands."""

    READY = "ready"
    LOOK = "look"
    UNKNOWN = "not known"


@dataclass(frozen=True, slots=True)
class Point:
    """One point: what was looked at (``station/tap`` or the lab), how it stands, why, and what to do (empty: nothing)."""

    what: str
    about: str
    standing: Standing
    said: str
    do: str = ""


def checklist(taps: Sequence[Tap], causes: Sequence[str], now: datetime) -> list[Point]:
    """Zero, clock, life, spool of each tap; open causes; the call chain."""
    silences = silences_now(taps, us_of(now))
    points: list[Point] = []
    for tap in taps:
        if tap.kind != TapKind.CLIMATE:
            points += [_alive(tap, silences.get(tap.pk)), *_zero(tap, now), _spool(tap, now)]
    for station in {tap.station_id: tap.station for tap in taps}.values():
        points += _clock(station, now)
    return [*points, _causes(causes), _chain(now)]


def _alive(tap: Tap, silence: Silence | None) -> Point:
    name = _name(tap)
    if silence is None:
        return Point("station alive", name, Standing.LOOK, "It was never heard.", "Start the station.")
    if silence.is_shown or silence.silent_s > max(LONG_UNHEARD_S, 3.0 * interval_of(tap)):
        return Point("station alive", name, Standing.LOOK, f"No reading for {span_text(silence.silent_s)}.",
                     "See whether the station has power and network.")
    return Point("station alive", name, Standing.READY, f"Heard {span_text(silence.silent_s)} ago.")


def _zero(tap: Tap, now: datetime) -> list[Point]:
    """Age of the zero; a polarimeter has none of its own here."""
    if tap.kind == TapKind.STOKES:
        return []
    version = version_at(tap.pk, now)
    taken_at = version.zero_taken_at if version else None
    if taken_at is None:
        return [Point("zero", _name(tap), Standing.LOOK, "No zero is on record.", "Block the beam and take one.")]
    said = f"Taken {span_text((now - taken_at).total_seconds())} ago."
    if now - taken_at > OLD_ZERO_AFTER:
        return [Point("zero", _name(tap), Standing.LOOK, said, "Block the beam and take a new one.")]
    return [Point("zero", _name(tap), Standing.READY, said)]


def _spool(tap: Tap, now: datetime) -> Point:
    """Whether what arrives is of now: else the station is still sending what it kept."""
    heard = TapHeard.objects.filter(tap=tap).first()
    if heard is None:
        return Point("spool empty", _name(tap), Standing.UNKNOWN, "Nothing was heard yet.")
    late_us = heard.last_arrival_us - heard.last_at_us
    if late_us > max(LATE_US, round(3.0 * interval_of(tap) * SECOND_US)):
        return Point("spool empty", _name(tap), Standing.LOOK, f"What arrives is {span_text(late_us / SECOND_US)} old.",
                     "Wait until the station has sent what it kept.")
    return Point("spool empty", _name(tap), Standing.READY, "What arrives is of now.")


def _clock(station: Station, now: datetime) -> list[Point]:
    """The newest boot's clock, and readings that were counted and never came."""
    newest = StationBoot.objects.filter(station=station).order_by("-last_arrival_us").first()
    if newest is None:
        return [Point("clock", station.name, Standing.UNKNOWN, "No boot is known: the readings came as a file.")]
    clock = Point("clock", station.name, Standing.READY, "The station's stamps agree with the server.")
    if newest.clock_fault:
        clock = Point("clock", station.name, Standing.LOOK, f"{newest.clock_fault}.".replace("..", "."),
                      "Set the station's clock; until then the server times its readings.")
    elif newest.is_server_timed:
        clock = Point("clock", station.name, Standing.LOOK, "The server times its readings.", "Set the station's clock.")
    missing = sum(one.count for one in troubles_of(station, {}, us_of(now)).missing if one.boot == newest.boot)
    if not missing:
        return [clock]
    return [clock, Point("spool empty", station.name, Standing.LOOK, f"{missing} readings were counted and have not come.",
                         "Wait for them; if they stay away the station's buffer has overrun.")]


def _causes(causes: Sequence[str]) -> Point:
    if causes:
        return Point("no open cause", "alarms", Standing.LOOK, f"Open: {'; '.join(causes[:3])}.", "Find and close it first.")
    return Point("no open cause", "alarms", Standing.READY, "No alarm is open.")


def _chain(now: datetime) -> Point:
    """Whether a call got through of late: a drill, told by the drills' own record."""
    drill = Drill.objects.filter(ended_at__isnull=False, failed_step="").order_by("-ended_at").first()
    if drill is None or drill.ended_at is None:
        return Point("call chain drilled", "lab", Standing.LOOK, "No drill has got through yet.", "Hold one before the run.")
    ago = now - drill.ended_at
    said = f"A drill got through {span_text(ago.total_seconds())} ago."
    if ago > PROOF_HOLDS:
        return Point("call chain drilled", "lab", Standing.LOOK, said, "Hold another.")
    return Point("call chain drilled", "lab", Standing.READY, said)


def _name(tap: Tap) -> str:
    return f"{tap.station.name}/{tap.name}"
