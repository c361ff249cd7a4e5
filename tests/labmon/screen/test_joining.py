"""A bench joins by its pages: who may, the key shown once, the slip, rotating, and what the door refused."""

import re

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext
from django.utils import timezone

from ingest.models import Station, StationKey, TapKind
from labmon.audit.models import AuditEntry
from labmon.benches.models import DoorRefusal
from labmon.people.models import Role
from tests.factories import make_person, make_station, make_tap
from tests.labmon.screen.test_pages import words

pytestmark = pytest.mark.django_db

TYPED = {"name": "b08", "room": "North Hall", "owner": "", "purpose": "EOM input", "name1": "eom-in", "kind1": "two-port",
         "unit1": "uW", "interval_s1": "1", "name2": "air", "kind2": "climate", "unit2": "W", "interval_s2": "", "name3": "",
         "kind3": "two-port", "unit3": "W", "interval_s3": ""}


def key_in(answer) -> str:
    return re.search(r'<code id="key">([^<]+)</code>', answer.content.decode()).group(1)


def test_a_manager_makes_a_station_and_gets_its_slip(client):
    client.force_login(make_person(Role.MANAGER))
    assert client.get("/join/").status_code == 200
    answer = client.post("/join/", TYPED)
    station = Station.objects.get(name="b08")
    assert answer.status_code == 200 and "no-store" in answer["Cache-Control"]
    assert [(tap.name, tap.kind, tap.unit, tap.interval_s) for tap in station.taps.order_by("pk")] == [
        ("eom-in", "two-port", "uW", 1.0), ("air", "climate", "", None)]
    key, said = key_in(answer), words(answer)
    assert "b08 has not been heard yet." in said
    assert "never look into a fibre" in said and "laser-safety officer" in said
    assert f"Bearer {key}" in answer.content.decode().replace("&#x27;", "'")
    assert "[tap eom-in]" in said and "[tap air]" in said
    again = client.get("/stations/b08/joining/")
    assert key not in again.content.decode() and "&lt;station key&gt;" in again.content.decode()
    assert AuditEntry.objects.filter(action="add station").count() == 1


def test_a_station_without_tap_or_with_a_name_taken_is_refused_at_its_field(client):
    client.force_login(make_person(Role.MANAGER))
    answer = client.post("/join/", TYPED | {"name1": "", "name2": ""})
    assert answer.status_code == 422 and "Name one tap at least" in words(answer)
    make_station("b08")
    answer = client.post("/join/", TYPED)
    assert answer.status_code == 422 and "already exists" in words(answer)
    assert not StationKey.objects.exists()


@pytest.mark.parametrize(("role", "status"), [(Role.OWNER, 403), (Role.RESEARCHER, 403), (Role.GUEST, 403)])
def test_only_managers_add_stations(client, role, status):
    client.force_login(make_person(role))
    assert client.get("/join/").status_code == status
    assert client.post("/join/", TYPED).status_code == status
    assert not Station.objects.exists()


def test_an_owner_adds_a_tap_to_their_own_bench_only(client):
    owner = make_person(Role.OWNER)
    make_station("mine", owner=owner)
    make_station("other")
    client.force_login(owner)
    typed = {"name": "trap", "kind": "two-port", "unit": "mW", "interval_s": ""}
    assert client.post("/stations/mine/taps/", typed).status_code == 302
    assert client.post("/stations/mine/taps/", typed).status_code == 422
    assert client.post("/stations/other/taps/", typed).status_code == 403
    assert [tap.name for tap in Station.objects.get(name="mine").taps.all()] == ["trap"]
    assert client.get("/stations/other/joining/").status_code == 403


def test_changing_the_key_lets_both_hold_for_the_stated_time(client):
    station = make_station("b08")
    make_tap(station)
    client.force_login(make_person(Role.MANAGER))
    client.post("/stations/b08/keys/")
    old = StationKey.objects.get()
    before = timezone.now()
    answer = client.post("/stations/b08/keys/", {"overlap_h": "2,5"})
    old.refresh_from_db()
    new = StationKey.objects.exclude(pk=old.pk).get()
    assert key_in(answer)[:4] == new.hint
    assert 2.4 < (old.expires_at - before).total_seconds() / 3600 < 2.6
    assert (old.revoked_at, new.expires_at) == (None, None)


@pytest.mark.parametrize("typed", ["-1", "nan", "1e9", "a day"])
def test_a_wrong_overlap_changes_nothing(client, typed):
    make_tap(make_station("b08"))
    client.force_login(make_person(Role.MANAGER))
    assert client.post("/stations/b08/keys/", {"overlap_h": typed}, follow=True).status_code == 200
    assert not StationKey.objects.exists()


def test_what_the_door_refused_of_an_old_key_stands_on_the_slip(client):
    station = make_station("b08")
    make_tap(station, "eom-in")
    now = timezone.now()
    for owner, hint, mark in ((station, "oldk", b"1"), (None, "none", b"2")):
        DoorRefusal.objects.create(station=owner, mark=mark * 16, hint=hint, remote_address="192.0.2.9", status=401,
                                   title="the key was revoked" if owner else "the key is not known", detail="", count=3,
                                   first_at=now, last_at=now)
    client.force_login(make_person(Role.MANAGER))
    client.post("/stations/b08/keys/")
    said = words(client.get("/stations/b08/joining/"))
    assert "begins with oldk" in said and "begins with none" in said and "192.0.2.9" in said


def test_queries_do_not_grow_with_taps_and_refusals(client):
    station = make_station("b08")
    client.force_login(make_person(Role.MANAGER))

    def count(taps: int) -> int:
        for number in range(taps):
            make_tap(station, kind=TapKind.TWO_PORT)
            DoorRefusal.objects.create(mark=f"{taps}-{number}".encode().ljust(16), status=401, title="the key is not known",
                                       detail="", first_at=timezone.now(), last_at=timezone.now())
        with CaptureQueriesContext(connection) as captured:
            assert client.get("/stations/b08/joining/").status_code == 200
        return len(captured)

    count(1)
    assert count(2) == count(20) <= 16
