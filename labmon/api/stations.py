"""Stations and their taps: heard when, in what health, by which clock."""

from collections.abc import Iterable
from typing import Any

from django.db.models import Prefetch
from django.http import HttpRequest, HttpResponse

from ingest.models import Station, StationBoot, Tap
from ingest.times import us_of
from labmon.api.answer import json_answer
from labmon.api.query import known_only
from labmon.api.times import rfc3339
from labmon.benches.queries import bench_rows
from labmon.people.models import Person
from labmon.people.rights import stations_visible_to


def get_stations(request: HttpRequest, person: Person) -> HttpResponse:
    """All stations that the caller may see, by name."""
    known_only(request.GET)
    taps = Prefetch("taps", Tap.objects.select_related("heard").order_by("name"))
    stations = list(stations_visible_to(person).select_related("room", "bench").prefetch_related(taps).order_by("name"))
    boots = newest_boots(stations)
    health = {row.station: row.state for row in bench_rows(person)}
    return json_answer({"stations": [station_facts(one, boots.get(one.pk), health.get(one.name, "never heard"))
                                     for one in stations]})


def newest_boots(stations: Iterable[Station]) -> dict[int, StationBoot]:
    """The boot heard last, by station id."""
    rows = StationBoot.objects.filter(station__in=[one.pk for one in stations])
    return {row.station_id: row for row in rows.order_by("station_id", "-last_arrival_us").distinct("station_id")}


def station_facts(station: Station, boot: StationBoot | None, health: str) -> dict[str, Any]:
    """A station as the contract names it; the clock is that of its newest boot."""
    taps = list(station.taps.all())
    heard = [tap.heard.last_arrival_us for tap in taps if hasattr(tap, "heard")]
    offset_us = boot.clock_offset_us if boot else None
    return {"name": station.name, "room": station.room.name if station.room else None, "health": health,
            **_shared(station),
            "last_heard_at": rfc3339(max(heard)) if heard else None, "firmware": (boot.firmware or None) if boot else None,
            "clock_offset_s": None if offset_us is None else offset_us / 1e6,
            "clock_fault": (boot.clock_fault or None) if boot else None,
            "is_server_timed": bool(boot and boot.is_server_timed),
            "link_lost_at": rfc3339(us_of(station.link_lost_at)) if station.link_lost_at else None,
            "taps": [tap_facts(station, tap) for tap in taps]}


def _shared(station: Station) -> dict[str, str | None]:
    """What the bench shares with others, besides its room."""
    bench = getattr(station, "bench", None)
    return {kind: (getattr(bench, kind) or None) if bench else None for kind in ("laser", "logger", "network")}


def tap_facts(station: Station, tap: Tap) -> dict[str, Any]:
    """A tap as the contract names it."""
    heard = getattr(tap, "heard", None)
    return {"tap": f"{station.name}/{tap.name}", "name": tap.name, "kind": tap.kind, "unit": tap.unit or None,
            "interval_s": tap.interval_s, "last_heard_at": rfc3339(heard.last_arrival_us) if heard else None,
            "newest_at": rfc3339(heard.last_at_us) if heard else None, "unknown_columns": tap.unknown_columns}
