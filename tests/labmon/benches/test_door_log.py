"""What the door noticed is kept in bounded tables, under the station whose key it was."""

import pytest

from ingest.door.notices import KeyRefused, KeyUsed, Notices
from ingest.models import StationKey
from ingest.stations import digest_of, make_key
from labmon.benches import door_log
from labmon.benches.door_log import keep_notices
from labmon.benches.models import DoorRefusal, KeyUse
from tests.factories import NOON, NOON_US, make_station

pytestmark = pytest.mark.django_db


def refused(key: str, *, at_us: int = NOON_US, address: str = "192.0.2.7", title: str = "the key was revoked") -> Notices:
    one = KeyRefused(digest=digest_of(key), hint=key[:4], remote_address=address, status=401, title=title, detail="Use another.",
                     field="", first_us=at_us, last_us=at_us)
    return Notices(refused={(one.digest, address, title, ""): one})


def test_a_refusal_stands_under_the_station_whose_key_it_was():
    station = make_station()
    key = make_key(station)
    keep_notices(refused(key))
    keep_notices(refused(key, at_us=NOON_US + 60_000_000))
    row = DoorRefusal.objects.get()
    assert (row.station, row.count, row.first_at) == (station, 2, NOON)
    assert (row.last_at - row.first_at).total_seconds() == 60


def test_a_key_that_is_nobodys_stands_under_no_station():
    keep_notices(refused("nobody's key with enough letters", title="the key is not known"))
    assert DoorRefusal.objects.get().station is None


def test_only_the_newest_are_kept(monkeypatch):
    monkeypatch.setattr(door_log, "MOST_KEPT", 3)
    for number in range(6):
        keep_notices(refused(f"nobody's key number {number}", at_us=NOON_US + number))
    assert DoorRefusal.objects.count() == 3
    assert DoorRefusal.objects.order_by("last_at").first().last_at > NOON


def test_the_last_use_of_a_key_is_kept_once():
    station = make_station()
    key = make_key(station)
    digest = digest_of(key)
    for at_us, address in ((NOON_US, "192.0.2.7"), (NOON_US + 1_000_000, "192.0.2.8")):
        keep_notices(Notices(used={digest: KeyUsed(digest, at_us, address)}))
    use = KeyUse.objects.get()
    assert (use.key, use.remote_address) == (StationKey.objects.get(), "192.0.2.8")
