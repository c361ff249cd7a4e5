"""The commands that an outsider may rely on: one JSON line, and a remedy where something is wrong."""

import io
import json

import pytest
from django.core.management import CommandError, call_command

from ingest.models import Station, StationKey
from ingest.stations import digest_of
from labmon.people.keys import person_of_key
from labmon.people.models import Person, PersonKey, Role
from tests.factories import make_person, make_station

pytestmark = pytest.mark.django_db


def run(*words):
    out = io.StringIO()
    call_command(*words, stdout=out)
    line, = out.getvalue().splitlines()
    return json.loads(line)


def test_add_station_makes_taps_of_every_kind_and_shows_the_key_once():
    said = run("add_station", "bench-a", "--two-port", "in=mW", "--two-port", "out=dBm", "--dark-port", "eom=uW", "--stokes",
               "sop=W", "--climate", "air", "--room", "room 1", "--interval-s", "in=0.1")
    assert said.keys() == {"station", "key"} and said["station"] == "bench-a"
    station = Station.objects.get(name="bench-a")
    assert list(station.taps.order_by("name").values_list("name", "kind", "unit", "interval_s")) == [
        ("air", "climate", "", None), ("eom", "dark-port", "uW", None), ("in", "two-port", "mW", 0.1),
        ("out", "two-port", "dBm", None), ("sop", "stokes", "W", None)]
    assert station.room.name == "room 1"
    assert bytes(station.keys.get().digest) == digest_of(said["key"])


@pytest.mark.parametrize(("words", "remedy"), [
    (["Bench"], "small letters"), (["bench-b", "--two-port", "in"], "TAP=UNIT"), (["bench-b", "--two-port", "in=kW"], "kW"),
    (["bench-b", "--two-port", "in=W", "--climate", "in"], "own name"), (["bench-b", "--stokes", "SOP=W"], "small letters"),
    (["bench-b", "--room", "a", "--room", "b"], "once"), (["bench-b", "--interval-s", "in=1"], "no tap"),
    (["bench-b", "--two-port", "in=W", "--interval-s", "in=fast"], "seconds"), (["bench-b", "--owner", "nobody"], "add_person"),
    (["bench-a"], "already")])
def test_add_station_says_what_to_do_and_leaves_nothing(words, remedy):
    make_station("bench-a")
    with pytest.raises(CommandError, match=remedy):
        run("add_station", *words)
    assert Station.objects.count() == 1


def test_add_person_gives_a_key_that_works():
    said = run("add_person", "maren", "--role", "manager")
    assert said.keys() == {"person", "key"} and said["person"] == "maren"
    assert person_of_key(said["key"]).role == Role.MANAGER
    assert not Person.objects.get().has_usable_password()


def test_add_person_for_a_guest_names_benches_and_a_date():
    station = make_station("bench-a")
    run("add_person", "visitor", "--role", "guest", "--station", "bench-a", "--until", "2031-03-04T00:00:00Z")
    person = Person.objects.get()
    assert list(person.guest_stations.all()) == [station] and person.guest_until.isoformat() == "2031-03-04T00:00:00+00:00"


def test_add_person_takes_a_password_from_standard_input(monkeypatch):
    monkeypatch.setattr("sys.stdin", io.StringIO("polarized light\n"))
    run("add_person", "maren", "--role", "owner", "--ask-password")
    assert Person.objects.get().check_password("polarized light")


@pytest.mark.parametrize(("words", "remedy"), [
    (["maren", "--role", "owner"], "another name"), (["a b", "--role", "owner"], "name"),
    (["x", "--role", "king"], "invalid choice"), (["x"], "--role"),
    (["x", "--role", "guest", "--station", "bench-z"], "add_station"),
    (["x", "--role", "guest", "--until", "soon"], "zone")])
def test_add_person_says_what_to_do(words, remedy):
    make_person(username="maren")
    with pytest.raises(CommandError, match=remedy):
        run("add_person", *words)
    assert Person.objects.count() == 1 and not PersonKey.objects.exists()


def test_a_station_key_is_made_and_revoked():
    make_station("bench-a")
    said = run("make_key", "bench-a", "--expires", "2031-03-04T00:00:00Z")
    row = StationKey.objects.get(pk=said["key_id"])
    assert bytes(row.digest) == digest_of(said["key"]) and row.expires_at.year == 2031
    assert run("revoke_key", "bench-a", "--id", str(row.pk)) == {"station": "bench-a", "revoked": [row.pk]}
    row.refresh_from_db()
    assert row.revoked_at is not None
    with pytest.raises(CommandError, match="no such key"):
        run("revoke_key", "bench-a", "--all")


def test_a_person_key_is_made_and_revoked_by_its_hint():
    make_person(username="maren")
    said = run("make_key", "--person", "maren")
    assert person_of_key(said["key"]).username == "maren"
    assert run("revoke_key", "--person", "maren", f"--hint={said['key'][-4:]}")["revoked"] == [said["key_id"]]
    assert person_of_key(said["key"]) is None


@pytest.mark.parametrize(("words", "remedy"), [
    (["make_key", "bench-z"], "add_station"), (["make_key", "--person", "zoe"], "add_person"), (["make_key"], "required"),
    (["make_key", "bench-z", "--expires", "never"], "zone"), (["revoke_key", "bench-z", "--all"], "no such key")])
def test_key_commands_say_what_to_do(words, remedy):
    with pytest.raises(CommandError, match=remedy):
        run(*words)


def test_run_mqtt_without_a_broker_says_what_to_set():
    with pytest.raises(CommandError, match="LABMON_MQTT_URL"):
        run("run_mqtt")
