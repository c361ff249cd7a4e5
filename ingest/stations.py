"""Registers stations with their taps, and makes and revokes station keys."""

import hashlib
import secrets
from dataclasses import dataclass
from datetime import datetime

from django.core.exceptions import ValidationError
from django.db import transaction
from django.utils import timezone

from ingest.broker_hash import broker_hash_of
from ingest.models import Room, Station, StationKey, Tap, TapKind, Unit

POWER_KINDS = {TapKind.TWO_PORT, TapKind.DARK_PORT, TapKind.STOKES}


class StationFault(ValueError):
    """A station cannot be made as asked; the message says why and what to do."""


@dataclass(frozen=True, slots=True)
class NewTap:
    """A tap to be made; climate taps have no unit."""

    name: str
    kind: str
    unit: str = ""
    interval_s: float | None = None
    is_float32: bool = False


@transaction.atomic
def add_station(name: str, room: Room | str | None = None, taps: list[NewTap] | None = None) -> tuple[Station, str]:
    """Make a station, its taps and its first key; the key is given here and never again.

    Raises:
        StationFault: A name or unit is not allowed or taken.
    """
    if isinstance(room, str):
        room = Room.objects.get_or_create(name=room)[0]
    station = Station(name=name, room=room)
    _check(station)
    station.save()
    for tap in taps or ():
        add_tap(station, tap)
    return station, make_key(station)


def add_tap(station: Station, wish: NewTap) -> Tap:
    """Make one tap of a station.

    Raises:
        StationFault: Name, kind or unit is not allowed or taken.
    """
    if wish.kind in POWER_KINDS and wish.unit not in Unit.values:
        raise StationFault(f"{wish.name}: {wish.unit!r} is no unit; use one of {' '.join(Unit.values)}")
    if wish.kind == TapKind.CLIMATE and wish.unit:
        raise StationFault(f"{wish.name}: a climate tap has no unit; its columns carry theirs in the name")
    tap = Tap(station=station, name=wish.name, kind=wish.kind, unit=wish.unit, interval_s=wish.interval_s,
              is_float32=wish.is_float32)
    _check(tap)
    tap.save()
    return tap


def make_key(station: Station, expires_at: datetime | None = None) -> str:
    """A new key of 256 random bits for the station; only its digest is stored, and its hash in the form of an MQTT broker."""
    key = secrets.token_urlsafe(32)
    StationKey.objects.create(station=station, digest=digest_of(key), hint=key[:4], expires_at=expires_at,
                              broker_hash=broker_hash_of(key))
    return key


def revoke_key(key_id: int) -> bool:
    """End a key at once (doors forget it within two seconds); False where it was revoked before."""
    return bool(StationKey.objects.filter(pk=key_id, revoked_at=None).update(revoked_at=timezone.now()))


def digest_of(key: str) -> bytes:
    """What is stored of a key. A plain hash suffices: the key is random, not a word that could be guessed."""
    return hashlib.sha256(key.encode("utf-8", "surrogatepass")).digest()


def _check(row: Station | Tap) -> None:
    try:
        row.full_clean(exclude={"unknown_columns"})
    except ValidationError as error:
        raise StationFault(f"{row.name}: {' '.join(error.messages)}") from error
