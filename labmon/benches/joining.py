"""How far a new station has come: what its slip's checklist is ticked by. A fixed number of queries."""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Final

from django.db.models import Q
from django.utils import timezone

from analysis.reduce.plausible import Oddity, oddity_of
from ingest.files.origin import FILE_BOOT
from ingest.models import SetAside, Station, StationBoot, StationKey, Tap, TapKind
from ingest.store.columns import Readings
from ingest.store.read import newest_readings
from ingest.times import at_of
from ingest.times import now_us as server_now_us
from labmon.benches.models import DoorRefusal
from labmon.benches.queries import now_samples
from labmon.benches.show import NowSample

#: Wrong keys that are nobody's concern a bench that is joining only while they are this new.
RECENT: Final = timedelta(minutes=30)
READINGS_LOOKED_AT: Final = 60
_POWER_COLUMNS: Final = ("port1", "port2", "monitor", "s0", "power")


@dataclass(frozen=True, slots=True)
class KeyFacts:
    """A key of the station; ``used_at`` is None where no station has come with it."""

    hint: str
    made_at: datetime
    used_at: datetime | None
    used_from: str


@dataclass(frozen=True, slots=True)
class TapJoining:
    """What has come of one tap."""

    name: str
    kind: str
    unit: str
    heard_at: datetime | None
    columns: list[str]
    unknown_columns: list[str]
    oddities: Mapping[str, tuple[Oddity, float]]
    """By column: what is improbable about it, and the value in the middle, in the tap's unit."""
    now: NowSample | None
    aside: SetAside | None
    """Its newest reading set aside."""


@dataclass(frozen=True, slots=True)
class Joining:
    """All that the checklist says. ``refused`` are the newest refusals of this station's keys, ``strangers`` of nobody's."""

    station: Station
    keys: list[KeyFacts]
    boot: StationBoot | None
    taps: list[TapJoining]
    refused: list[DoorRefusal]
    strangers: list[DoorRefusal]
    now: datetime


def joining_of(station: Station) -> Joining:
    """How far ``station`` has come."""
    now = timezone.now()
    taps = list(station.taps.select_related("heard").order_by("pk"))
    ids = [tap.pk for tap in taps]
    readings = newest_readings(ids, count=READINGS_LOOKED_AT)
    samples = now_samples(ids, server_now_us())
    asides = {row.tap_id: row for row in SetAside.objects.filter(tap__in=ids).order_by("tap_id", "-pk").distinct("tap_id")}
    refusals = list(DoorRefusal.objects.filter(Q(station=station) | Q(station=None, last_at__gte=now - RECENT))
                    .order_by("-last_at")[:20])
    return Joining(
        station=station,
        keys=[_key_facts(key) for key in _keys_in_force(station, now)],
        boot=station.boots.exclude(boot__startswith=FILE_BOOT).order_by("-last_arrival_us").first(),
        taps=[_tap_joining(tap, readings[tap.pk], samples.get(tap.pk), asides.get(tap.pk)) for tap in taps],
        refused=[row for row in refusals if row.station_id == station.pk],
        strangers=[row for row in refusals if row.station_id is None],
        now=now,
    )


def _keys_in_force(station: Station, now: datetime) -> list[StationKey]:
    in_force = station.keys.filter(Q(expires_at=None) | Q(expires_at__gt=now), revoked_at=None)
    return list(in_force.select_related("use").order_by("-pk"))


def _key_facts(key: StationKey) -> KeyFacts:
    use = getattr(key, "use", None)
    return KeyFacts(key.hint, key.made_at, use.last_used_at if use else None, use.remote_address if use else "")


def _tap_joining(tap: Tap, readings: Readings, now: NowSample | None, aside: SetAside | None) -> TapJoining:
    heard_us = tap.heard.last_arrival_us if hasattr(tap, "heard") else None
    sent = [name for name, values in readings.columns.items() if name != "uptime_ms" and bool((values == values).any())]
    return TapJoining(name=tap.name, kind=tap.kind, unit=tap.unit, heard_at=at_of(heard_us) if heard_us is not None else None,
                      columns=sent, unknown_columns=list(tap.unknown_columns), oddities=_oddities(tap, readings), now=now,
                      aside=aside)


def _oddities(tap: Tap, readings: Readings) -> dict[str, tuple[Oddity, float]]:
    if tap.kind == TapKind.CLIMATE:
        return {}
    found = {}
    for name in _POWER_COLUMNS:
        values = readings.columns.get(name)
        oddity = oddity_of(values, tap.unit) if values is not None else None
        if oddity is not None and values is not None:
            known = values[values == values]
            found[name] = (oddity, float(sorted(known)[len(known) // 2]))
    return found
