"""The only writer of what the door noticed: a bounded table each, so that a flood of wrong keys or repeats costs nothing."""

from collections.abc import Mapping
from datetime import timedelta
from hashlib import blake2b
from typing import Final

from django.db import close_old_connections, transaction
from django.db.models import F
from django.db.models.functions import Greatest
from django.utils import timezone

from ingest.door.notices import ClientTold, KeyRefused, Notices, Repeats
from ingest.models import Station, StationKey
from ingest.times import at_of
from labmon.benches.models import ClientState, DoorHour, DoorRefusal, KeyUse
from labmon.live.publish import publish

#: So many refusals are kept of keys that are somebody's, and so many of those that are nobody's.
MOST_KEPT: Final = 300
HOURS_KEPT: Final = timedelta(days=8)


def keep_notices_in_thread(found: Notices) -> None:
    """The same from a thread that lives long: a connection that the database has closed meanwhile is opened anew."""
    close_old_connections()
    keep_notices(found)


def keep_notices(found: Notices) -> None:
    """Write down what the door noticed and tell the pages."""
    if not (found.used or found.refused or found.repeats or found.told):
        return
    with transaction.atomic():
        owners = _owners({*found.used, *(one.digest for one in found.refused.values())})
        _keep_used(found, owners)
        for refused in found.refused.values():
            _keep_refused(refused, owners.get(refused.digest))
        if found.refused:
            _drop_old()
        here = set(Station.objects.filter(pk__in={*found.repeats, *found.told}).values_list("pk", flat=True))
        _keep_repeats({station_id: one for station_id, one in found.repeats.items() if station_id in here})
        _keep_told({station_id: one for station_id, one in found.told.items() if station_id in here})
        publish({"kind": "door", "ids": sorted({station_id for _, station_id in owners.values()} | here)})


def _owners(digests: set[bytes]) -> dict[bytes, tuple[int, int]]:
    """Key id and station id of those digests that are somebody's."""
    rows = StationKey.objects.filter(digest__in=digests).values_list("digest", "pk", "station_id")
    return {bytes(digest): (key_id, station_id) for digest, key_id, station_id in rows}


def _keep_used(found: Notices, owners: dict[bytes, tuple[int, int]]) -> None:
    rows = [KeyUse(key_id=owners[one.digest][0], last_used_at=at_of(one.at_us), remote_address=one.remote_address)
            for one in found.used.values() if one.digest in owners]
    KeyUse.objects.bulk_create(rows, update_conflicts=True, unique_fields=["key"],
                               update_fields=["last_used_at", "remote_address"])


def _keep_refused(refused: KeyRefused, owner: tuple[int, int] | None) -> None:
    parts = (refused.digest, refused.remote_address.encode(), refused.title.encode(), refused.field.encode())
    mark = blake2b(b"\0".join(parts), digest_size=16).digest()
    row, _ = DoorRefusal.objects.get_or_create(mark=mark, defaults={
        "station_id": owner[1] if owner else None, "hint": refused.hint, "remote_address": refused.remote_address,
        "status": refused.status, "title": refused.title, "detail": refused.detail, "field": refused.field,
        "first_at": at_of(refused.first_us), "last_at": at_of(refused.last_us)})
    DoorRefusal.objects.filter(pk=row.pk).update(count=F("count") + refused.count,
                                                 last_at=Greatest(F("last_at"), at_of(refused.last_us)))


def _keep_repeats(repeats: Mapping[int, Repeats]) -> None:
    """Added to the hour's counts; hours that are older than `HOURS_KEPT` go."""
    if not repeats:
        return
    hour_at = timezone.now().replace(minute=0, second=0, microsecond=0)
    for station_id, one in sorted(repeats.items()):
        DoorHour.objects.get_or_create(station_id=station_id, hour_at=hour_at)
        DoorHour.objects.filter(station_id=station_id, hour_at=hour_at).update(
            known=F("known") + one.known, disordered=F("disordered") + one.disordered)
    DoorHour.objects.filter(hour_at__lt=hour_at - HOURS_KEPT).delete()


def _keep_told(told: Mapping[int, ClientTold]) -> None:
    rows = [ClientState(station_id=station_id, told_at=at_of(one.at_us), waiting=one.health.waiting, dropped=one.health.dropped,
                        restarts=one.health.restarts, clock=one.health.clock, mute=list(one.health.mute))
            for station_id, one in sorted(told.items())]
    ClientState.objects.bulk_create(rows, update_conflicts=True, unique_fields=["station"],
                                    update_fields=["told_at", "waiting", "dropped", "restarts", "clock", "mute"])


def _drop_old() -> None:
    for is_nobodys in (True, False):
        rows = DoorRefusal.objects.filter(station__isnull=is_nobodys)
        kept = rows.order_by("-last_at", "-pk").values_list("pk", flat=True)[:MOST_KEPT]
        rows.exclude(pk__in=list(kept)).delete()
