"""Benches as people change them: stations, taps, keys, owners. Each write leaves its audit row."""

from collections.abc import Sequence
from datetime import datetime

from django.db import transaction

from ingest.models import Station, StationKey, Tap
from ingest.stations import NewTap, StationFault, add_station, make_key, revoke_key
from ingest.stations import add_tap as add_plain_tap
from labmon.audit.actions import note
from labmon.benches.models import Bench
from labmon.errors import WriteError
from labmon.live.publish import publish
from labmon.people.models import Person

TapWish = NewTap


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
