"""Keys are remembered for a moment only, and looked up again when their connection broke."""

import time
from datetime import timedelta

import pytest
from django.utils import timezone

from ingest.door import keys
from ingest.models import StationKey
from ingest.stations import NewTap, add_station, digest_of, make_key, revoke_key

pytestmark = pytest.mark.django_db(transaction=True)


@pytest.fixture
def ring():
    """A key ring with one good key: (ring, key)."""
    _, key = add_station("bench", None, [NewTap("eom-in", "two-port", "W"), NewTap("air", "climate")])
    made = keys.KeyRing()
    yield made, key
    made.close()


def test_a_key_opens_its_station_with_its_taps(ring):
    known = ring[0].look_up(ring[1])
    assert known.station.name == "bench" and known.reason_to_refuse() == ""
    assert {name: (tap.kind, tap.unit) for name, tap in known.station.taps.items()} == {
        "eom-in": ("two-port", "W"),
        "air": ("climate", ""),
    }


def test_a_key_is_remembered_for_less_than_two_seconds(ring, monkeypatch):
    ring, key = ring
    assert ring.remembered(key) is None
    ring.look_up(key)
    assert ring.remembered(key) is not None and keys.REMEMBERED_S < 2
    later = time.monotonic() + 2
    monkeypatch.setattr(keys.time, "monotonic", lambda: later)
    assert ring.remembered(key) is None


def test_an_unknown_key_is_remembered_as_such(ring):
    assert ring[0].look_up("guess").reason_to_refuse() == "the key is not known"
    assert ring[0].remembered("guess").station is None


def test_many_guesses_do_not_fill_the_memory(ring, monkeypatch):
    monkeypatch.setattr(keys, "_MOST", 3)
    for number in range(10):
        ring[0].look_up(f"guess {number}")
    assert len(ring[0]._kept) <= 3


def test_a_broken_connection_is_opened_anew(ring):
    ring, key = ring
    ring.look_up(key)
    ring._db.close()
    assert ring.look_up(key).station is not None


def test_a_revoked_key_says_so(ring):
    revoke_key(StationKey.objects.get().pk)
    assert ring[0].look_up(ring[1]).reason_to_refuse() == "the key was revoked"


def test_a_name_opens_its_station_while_one_key_is_in_force():
    station, key = add_station("bench", None, [NewTap("eom-in", "two-port", "W")])
    ring = keys.NameRing()
    assert set(ring.look_up("bench").station.taps) == {"eom-in"} and ring.remembered("bench").station.name == "bench"
    assert ring.look_up("bunch").reason_to_refuse() == "the station is not known or has no key"
    second = make_key(station, timezone.now() + timedelta(seconds=60))
    revoke_key(StationKey.objects.get(digest=digest_of(key)).pk)
    assert ring.look_up("bench").reason_to_refuse() == ""
    StationKey.objects.filter(digest=digest_of(second)).update(expires_at=timezone.now() - timedelta(seconds=1))
    assert ring.look_up("bench").reason_to_refuse() == "the key has expired"
    StationKey.objects.update(revoked_at=timezone.now())
    assert ring.look_up("bench").reason_to_refuse() == "the key was revoked"
    StationKey.objects.all().delete()
    assert ring.look_up("bench").reason_to_refuse() == "the station is not known or has no key"
    ring.close()
