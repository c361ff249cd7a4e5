import pytest

from ingest.models import StationKey
from ingest.stations import digest_of
from labmon.audit.models import AuditEntry
from labmon.benches.actions import TapWish, add_bench, add_tap, make_bench_key, revoke_bench_key, set_bench_owner
from labmon.errors import WriteError
from labmon.people.models import Role
from tests.factories import make_person, make_station

pytestmark = pytest.mark.django_db


def test_bench_with_taps_room_owner_and_key():
    owner, chief = make_person(Role.OWNER, username="asha"), make_person()
    station, key = add_bench("n2", taps=[TapWish("eom-in", "two-port", "mW")], room="North Hall", owner=owner, by=chief)
    assert (station.room.name, station.bench.owner, station.taps.get().unit) == ("North Hall", owner, "mW")
    assert bytes(station.keys.get().digest) == digest_of(key)
    assert [entry.action for entry in AuditEntry.objects.order_by("pk")] == ["add station", "make station key"]
    assert key not in str(list(AuditEntry.objects.values()))


@pytest.mark.parametrize(
    "taps", [[TapWish("eom-in", "two-port", "lux")], [TapWish("A B", "two-port", "mW")], [TapWish("t", "kind", "mW")]]
)
def test_bench_that_cannot_be_made_leaves_nothing(taps):
    with pytest.raises(WriteError):
        add_bench("n2", taps=taps)
    assert not StationKey.objects.exists() and not AuditEntry.objects.exists()


def test_further_tap():
    station = make_station()
    assert add_tap(station, TapWish("air", "climate"), by=None).station == station
    with pytest.raises(WriteError):
        add_tap(station, TapWish("air", "climate"), by=None)


def test_key_is_shown_once_and_revoked_once():
    station = make_station()
    row, key = make_bench_key(station, by=None)
    assert bytes(row.digest) == digest_of(key)
    for _ in range(2):
        revoke_bench_key(row.pk, by=None)
    assert StationKey.objects.get().revoked_at is not None
    assert [entry.action for entry in AuditEntry.objects.order_by("pk")] == ["make station key", "revoke station key"]


def test_bench_is_passed_on():
    station, heir = make_station(owner=make_person(Role.OWNER, username="asha")), make_person(Role.OWNER, username="tobias")
    set_bench_owner(station, heir, by=None, reason="Asha leaves")
    entry = AuditEntry.objects.get()
    assert (entry.before, entry.after) == ({"owner": "asha"}, {"owner": "tobias"})
