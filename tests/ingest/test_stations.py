"""Stations, taps and keys are made only as they may be."""

import pytest

from ingest.models import Room, Station, StationKey
from ingest.stations import NewTap, StationFault, add_station, digest_of, make_key, revoke_key

pytestmark = pytest.mark.django_db


def test_a_station_is_made_with_its_taps_room_and_key():
    station, key = add_station("bench-7", "cellar", [NewTap("eom-in", "two-port", "uW", 1.0), NewTap("air", "climate")])
    assert station.room == Room.objects.get(name="cellar")
    assert list(station.taps.order_by("id").values_list("name", "kind", "unit", "interval_s")) == [
        ("eom-in", "two-port", "uW", 1.0),
        ("air", "climate", "", None),
    ]
    assert bytes(StationKey.objects.get().digest) == digest_of(key)
    assert add_station("bench-8", "cellar")[0].room == station.room


def test_keys_are_long_and_never_alike():
    station, first = add_station("bench-7")
    keys = {first, *(make_key(station) for _ in range(50))}
    assert len(keys) == 51 and all(len(key) == 43 for key in keys)  # 256 bits in base64url


@pytest.mark.parametrize(
    ("name", "taps"),
    [
        ("Bench", []),
        ("", []),
        ("-a", []),
        ("a b", []),
        ("a" * 64, []),
        ("taken", []),
        ("a\n", []),
        ("ok", [NewTap("Tap", "two-port", "W")]),
        ("ok", [NewTap("tap", "two-port", "")]),
        ("ok", [NewTap("tap", "two-port", "lux")]),
        ("ok", [NewTap("tap", "three-port", "W")]),
        ("ok", [NewTap("air", "climate", "W")]),
        ("ok", [NewTap("tap", "stokes", "W"), NewTap("tap", "stokes", "W")]),
        ("ok", [NewTap("tap", "stokes", "W", -1.0)]),
    ],
)
def test_what_may_not_be_made_is_refused_whole(name, taps):
    add_station("taken")
    with pytest.raises(StationFault):
        add_station(name, None, taps)
    assert Station.objects.count() == 1


def test_a_key_is_revoked_once():
    add_station("bench-7")
    key = StationKey.objects.get()
    assert revoke_key(key.pk) and not revoke_key(key.pk)
    key.refresh_from_db()
    assert key.revoked_at is not None
