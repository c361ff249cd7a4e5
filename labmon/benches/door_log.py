"""The only writer of what the door noticed of keys: a bounded table each, so that a flood of wrong keys costs nothing."""

from hashlib import blake2b
from typing import Final

from django.db import close_old_connections, transaction
from django.db.models import F
from django.db.models.functions import Greatest

from ingest.door.notices import KeyRefused, Notices
from ingest.models import StationKey
from ingest.times import at_of
from labmon.benches.models import DoorRefusal, KeyUse
from labmon.live.publish import publish

#: So many refusals are kept of keys that are somebody's, and so many of those that are nobody's.
MOST_KEPT: Final = 300


def keep_notices_in_thread(found: Notices) -> None:
    """The same from a thread that lives long: a connection that the database has closed meanwhile is opened anew."""
    close_old_connections()
    keep_notices(found)


def keep_notices(found: Notices) -> None:
    """Write down what the door noticed and tell the pages."""
    if not found.used and not found.refused:
        return
    with transaction.atomic():
        owners = _owners({*found.used, *(one.digest for one in found.refused.values())})
        _keep_used(found, owners)
        for refused in found.refused.values():
            _keep_refused(refused, owners.get(refused.digest))
        if found.refused:
            _drop_old()
        publish({"kind": "door", "ids": sorted({station_id for _, station_id in owners.values()})})


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


def _drop_old() -> None:
    for is_nobodys in (True, False):
        rows = DoorRefusal.objects.filter(station__isnull=is_nobodys)
        kept = rows.order_by("-last_at", "-pk").values_list("pk", flat=True)[:MOST_KEPT]
        rows.exclude(pk__in=list(kept)).delete()
