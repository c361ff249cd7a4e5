"""Benches as people change them: stations, taps, keys, owners. Each write leaves its audit row."""

from collections.abc import Sequence
from datetime import datetime, timedelta
from typing import Final

from django.db import transaction
from django.db.models import Q
from django.utils import timezone

from ingest.models import Room, Station, StationKey, Tap
from ingest.stations import NewTap, StationFault, add_station, make_key, revoke_key
from ingest.stations import add_tap as add_plain_tap
from labmon.audit.actions import note
from labmon.benches.models import Bench
from labmon.errors import WriteError
from labmon.live.publish import publish
from labmon.people.models import Person

TapWish = NewTap
#: Two keys of one station hold side by side no longer than this.
LONGEST_OVERLAP: Final = timedelta(days=30)


@transaction.atomic
def add_bench(
    name: str,
    *,
    taps: Sequence[NewTap] = (),
    room: str = "",
    owner: Person | None = None,
    purpose: str = "",
    by: Person | None = None,
) -> tuple[Station, str]:
    """A station with its taps and first key; the key is given here and never again.

    Raises:
        WriteError: A name, kind or unit cannot be used.
    """
    try:
        station, key = add_station(name, room or None, list(taps))
    except StationFault as fault:
        raise WriteError("name", str(fault), "Choose another.") from fault
    Bench.objects.create(station=station, owner=owner, purpose=purpose)
    note(
        by,
        "add station",
        station,
        after={
            "room": room,
            "owner": owner.username if owner else None,
            "taps": [{"name": tap.name, "kind": str(tap.kind), "unit": str(tap.unit)} for tap in taps],
        },
    )
    note(by, "make station key", station, after={"key": station.keys.get().pk, "hint": station.keys.get().hint})
    publish({"kind": "stations", "ids": [station.pk]})
    return station, key


@transaction.atomic
def add_tap(station: Station, wish: NewTap, *, by: Person | None) -> Tap:
    """One more tap of a station.

    Raises:
        WriteError: Its name, kind or unit cannot be used.
    """
    try:
        tap = add_plain_tap(station, wish)
    except StationFault as fault:
        raise WriteError("tap", str(fault), "Choose another.") from fault
    note(by, "add tap", tap, after={"kind": tap.kind, "unit": tap.unit, "interval_s": tap.interval_s})
    publish({"kind": "stations", "ids": [station.pk]})
    return tap


@transaction.atomic
def make_bench_key(station: Station, *, by: Person | None, expires_at: datetime | None = None) -> tuple[StationKey, str]:
    """A further key of a station; shown this once."""
    key = make_key(station, expires_at)
    row = station.keys.order_by("-pk")[0]
    note(by, "make station key", station, after={"key": row.pk, "hint": row.hint, "expires_at": expires_at})
    publish({"kind": "stations", "ids": [station.pk]})
    return row, key


@transaction.atomic
def rotate_bench_key(station: Station, *, overlap: timedelta, by: Person | None) -> tuple[StationKey, str]:
    """A new key; those in force before stay good for ``overlap`` and not longer. Shown this once.

    Raises:
        WriteError: The overlap is negative or longer than `LONGEST_OVERLAP`.
    """
    if not timedelta(0) <= overlap <= LONGEST_OVERLAP:
        raise WriteError("overlap_h", f"{overlap.total_seconds() / 3600:g} h is no time for two keys to hold.",
                         f"Give 0 to {LONGEST_OVERLAP.days * 24} h.")
    until = timezone.now() + overlap
    before = list(station.keys.select_for_update().filter(Q(expires_at=None) | Q(expires_at__gt=until), revoked_at=None))
    row, key = make_bench_key(station, by=by)
    for old in before:
        old.expires_at = until
        old.save(update_fields=["expires_at"])
    note(by, "rotate station key", station, {"keys": [old.pk for old in before]}, {"key": row.pk, "old_keys_until": until})
    return row, key


@transaction.atomic
def revoke_bench_key(key_id: int, *, by: Person | None) -> None:
    """End a station key now; a second time changes nothing."""
    row = StationKey.objects.select_related("station").get(pk=key_id)
    if revoke_key(key_id):
        note(by, "revoke station key", row.station, after={"key": row.pk, "hint": row.hint})
        publish({"kind": "stations", "ids": [row.station_id]})


@transaction.atomic
def set_bench_owner(station: Station, owner: Person | None, *, by: Person | None, reason: str = "") -> Bench:
    """Pass a bench on."""
    bench, _ = Bench.objects.select_for_update(of=("self",)).get_or_create(station=station)
    before = bench.owner.username if bench.owner else None
    bench.owner = owner
    bench.save(update_fields=["owner"])
    note(by, "set bench owner", station, {"owner": before}, {"owner": owner.username if owner else None}, reason)
    publish({"kind": "stations", "ids": [station.pk]})
    return bench


@transaction.atomic
def set_shared(
    station: Station, *, room: str, laser: str, logger: str, network: str, by: Person | None, reason: str = ""
) -> Bench:
    """What a bench shares with others; empty where it shares nothing that anybody knows of.

    Raises:
        WriteError: A name is longer than 100 characters.
    """
    names = {"room": room, "laser": laser, "logger": logger, "network": network}
    names = {field: " ".join(name.replace("\0", "").split()) for field, name in names.items()}
    for field, name in names.items():
        if len(name) > 100:
            raise WriteError(field, "The name is longer than 100 characters.", "Choose a shorter one.")
    locked = Station.objects.select_for_update(of=("self",)).select_related("room").get(pk=station.pk)
    bench, _ = Bench.objects.select_for_update(of=("self",)).get_or_create(station=locked)
    before = shared_facts(locked, bench)
    locked.room = Room.objects.get_or_create(name=names["room"])[0] if names["room"] else None
    locked.save(update_fields=["room"])
    bench.laser, bench.logger, bench.network = names["laser"], names["logger"], names["network"]
    bench.save(update_fields=["laser", "logger", "network"])
    if (after := shared_facts(locked, bench)) != before:
        note(by, "set what a bench shares", station, before, after, reason)
        publish({"kind": "stations", "ids": [station.pk]})
    return bench


def shared_facts(station: Station, bench: Bench | None) -> dict[str, str]:
    """What a bench shares, by kind of thing."""
    facts = {one: getattr(bench, one) if bench else "" for one in ("laser", "logger", "network")}
    return {"room": station.room.name if station.room else ""} | facts
