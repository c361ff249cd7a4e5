"""Who is let in, what is refused, and how it is said (CONTRACT.md, section 1)."""

import gzip
import json
from datetime import UTC, datetime, timedelta

import psycopg
import pytest
from django.utils import timezone

from ingest.door import committer, keys
from ingest.models import DoorUp, Station, StationKey
from ingest.stations import NewTap, add_station, add_tap, make_key, revoke_key
from tests.ingest.conftest import two_port

JSON = {"Content-Type": "application/json"}


def problem(response, status):
    """The problem document, in the form of RFC 9457."""
    found = response.json()
    assert response.status_code == status == found["status"] and response.headers["content-type"] == "application/problem+json"
    assert found["title"] and found["detail"]
    return found


@pytest.mark.parametrize(
    "header", [None, "", "Bearer", "Bearer ", "Basic eDp5", "Bearer wrong", "Bearer \u00e4".encode("latin-1")]
)
def test_without_a_good_key_nobody_gets_in(sender, header):
    sender.client.headers.pop("Authorization")
    response = sender.post(two_port(), headers={} if header is None else {"Authorization": header})
    problem(response, 401)
    assert response.headers["www-authenticate"].startswith("Bearer ")


def test_a_revoked_key_is_refused_within_two_seconds(sender, monkeypatch):
    sender.send(two_port())
    assert revoke_key(StationKey.objects.get().pk) and not revoke_key(StationKey.objects.get().pk)
    assert keys.REMEMBERED_S <= 2.0
    monkeypatch.setattr(keys, "REMEMBERED_S", 0.0)
    assert "revoked" in problem(sender.post(two_port(1)), 401)["title"]


def test_an_expired_key_is_refused_at_once_though_remembered(sender, monkeypatch):
    sender.client.headers["Authorization"] = f"Bearer {make_key(sender.station, timezone.now() + timedelta(hours=1))}"
    sender.send(two_port())
    monkeypatch.setattr(keys, "now_us", lambda: int((datetime.now(UTC) + timedelta(hours=2)).timestamp()) * 10**6)
    assert "expired" in problem(sender.post(two_port(1)), 401)["title"]


def test_a_key_of_another_station_does_not_speak_for_it(sender):
    add_station("bench-2", None, [NewTap("eom-in", "two-port", "W")])
    assert problem(sender.post(two_port() | {"station": "bench-2"}), 403)["field"] == "station"
    sender.send(two_port() | {"station": "bench-1"})


def test_only_the_digest_of_a_key_is_stored(sender):
    kept = StationKey.objects.get()
    assert sender.key.encode() not in bytes(kept.digest) and len(sender.key) == 43 and len(kept.hint) <= 8


def test_a_tap_added_a_moment_ago_is_known(sender):
    sender.send(two_port())
    add_tap(Station.objects.get(), NewTap("new", "two-port", "W"))
    sender.send({"boot": "a", "taps": {"new": two_port()["taps"]["eom-in"]}})


@pytest.mark.parametrize(
    ("body", "field"),
    [
        ({"taps": []}, "taps"),
        ({}, "taps"),
        ({"taps": {"eom-in": 5}}, "taps.eom-in"),
        ({"taps": {"nobody": {"port1": [1], "port2": [1]}}}, "taps.nobody"),
        ({"taps": {"eom-in": {"port1": [1], "port2": [1, 2]}}}, "taps.eom-in.port2"),
        ({"taps": {"eom-in": {"at": [None] * 3, "port1": [1, 2], "port2": [1, 2]}}}, "taps.eom-in.at"),
        ({"taps": {"eom-in": {"port1": 1, "port2": 1}}}, "taps.eom-in.port1"),
        ({"taps": {"eom-in": {"port1": "AAAAAAAAAAA=", "port2": [1]}}}, "taps.eom-in.port1"),
        ({"taps": {"eom-in": {"port1": [1]}}}, "taps.eom-in"),
        ({"taps": {"dark": {"port1": [1]}}}, "taps.dark"),
        ({"taps": {"sop": {"s0": [1], "s1": [1], "s2": [1]}}}, "taps.sop"),
        ({"taps": {"air": {"drive_ma": [1]}}}, "taps.air"),
        ({"boot": 5, "taps": {}}, "boot"),
        ({"boot": "x" * 101, "taps": {}}, "boot"),
        ({"boot": "a\u0000b", "taps": {}}, "boot"),
        ({"firmware": ["1"], "taps": {}}, "firmware"),
        ({"now": 5, "taps": {}}, "now"),
        ({"now": {"at": "yesterday"}, "taps": {}}, "now.at"),
        ({"now": {"at": 1.5}, "taps": {}}, "now.at"),
        ({"now": {"uptime_ms": -1}, "taps": {}}, "now.uptime_ms"),
        ({"now": {"uptime_ms": "5"}, "taps": {}}, "now.uptime_ms"),
        ({"taps": {"eom-in": {"port1": [1], "port2": [1], "x" * 101: [1]}}}, "taps.eom-in"),
        ({"taps": {"eom-in": {"port1": [1], "port2": [1]} | {f"extra{n}": [1] for n in range(51)}}}, "taps.eom-in"),
    ],
)
def test_what_is_not_of_the_form_is_refused_with_the_field_and_a_remedy(sender, body, field):
    assert problem(sender.post(body), 400)["field"] == field


@pytest.mark.parametrize(
    "body",
    [
        b"",
        b"{",
        b"[]",
        b"null",
        b"5",
        b'"x"',
        b"\xff\xfe",
        b"\xef\xbb\xbf{}",
        b"{'a': 1}",
        b'{"taps": {},}',
        b'{"taps": NaN}',
        b'{"taps": {"eom-in": {"port1": [NaN], "port2": [1]}}}',
        b'{"taps": {"eom-in": {"port1": [-Infinity], "port2": [1]}}}',
        b'{"boot": "\\ud800", "taps": {}}',
        b'{"taps": {"eom-in": {"port1": [1], "port2": [1]}, "eom-in": {"port1": [2], "port2": [2]}}}',
        b'{"taps": ' + b"[" * 100_000,
        b'{"taps": {"a": ' + b"9" * 10_000 + b"}}",
    ],
)
def test_what_is_no_json_map_is_refused_whole(sender, body):
    problem(sender.post(body, headers=JSON), 400)
    assert not len(sender.stored())


def test_numbers_beyond_float64_are_set_aside_and_the_others_stored(sender):
    body = b'{"boot": "a", "taps": {"eom-in": {"sequence": [1, 2], "port1": [1e400, 0.5], "port2": [1, 1]}}}'
    answer = sender.post(body, headers=JSON).json()
    assert answer["stored"] == 1 and answer["set_aside"][0]["why"] == "infinity is not a power"


def test_a_refused_body_leaves_nothing(sender):
    body = two_port(0, 3)
    body["taps"]["air"] = {"temperature_c": [20.0, 21.0], "at": [1]}
    problem(sender.post(body), 400)
    assert not len(sender.stored())


@pytest.mark.parametrize("kind", ["text/plain", "application/x-www-form-urlencoded", "application/json; charset=latin-1", "x"])
def test_unknown_content_types_are_refused(sender, kind):
    assert problem(sender.post(b"{}", headers={"Content-Type": kind}), 400)["field"] == "Content-Type"


@pytest.mark.parametrize("kind", ["application/json", "application/json; charset=utf-8", 'Application/JSON;charset="UTF-8"', ""])
def test_json_in_utf_8_is_taken(sender, kind):
    sender.send(json.dumps(two_port()).encode(), headers={"Content-Type": kind} if kind else {})


def test_gzip_is_taken(sender):
    packed = gzip.compress(json.dumps(two_port(0, 50)).encode())
    assert sender.send(packed, headers=JSON | {"Content-Encoding": "gzip"})["stored"] == 50


def test_gzip_in_several_members_is_taken(sender):
    text = json.dumps(two_port(0, 5)).encode()
    sender.send(gzip.compress(text[:20]) + gzip.compress(text[20:]), headers=JSON | {"Content-Encoding": "gzip"})


@pytest.mark.parametrize(
    "damage",
    [
        lambda packed: packed[:-5],
        lambda packed: packed + b"x",
        lambda packed: b"x" + packed,
        lambda packed: packed[:20] + b"\0\0" + packed[22:],
        lambda packed: b"",
    ],
)
def test_damaged_gzip_is_refused(sender, damage):
    packed = gzip.compress(json.dumps(two_port(0, 50)).encode())
    problem(sender.post(damage(packed), headers=JSON | {"Content-Encoding": "gzip"}), 400)


def test_other_encodings_are_refused(sender):
    assert problem(sender.post(b"{}", headers=JSON | {"Content-Encoding": "br"}), 400)["field"] == "Content-Encoding"


def test_a_small_body_that_swells_is_stopped(sender):
    bomb = gzip.compress(b" " * (200 << 20))
    assert len(bomb) < 1 << 20
    problem(sender.post(bomb, headers=JSON | {"Content-Encoding": "gzip"}), 413)


def test_a_body_above_8_mib_is_refused(sender):
    problem(sender.post(b" " * ((8 << 20) + 1), headers=JSON), 413)
    problem(sender.post(b" " * (8 << 20), headers=JSON), 400)


def test_a_body_above_8_mib_in_pieces_is_refused(sender):
    async def pieces():
        for _ in range(9):
            yield b" " * (1 << 20)

    problem(sender.loop.run_until_complete(sender.client.post("/api/v1/readings", content=pieces(), headers=JSON)), 413)


def test_more_than_100_000_readings_are_refused(sender):
    body = {"taps": {"adc": {"at": [0] * 100_001, "port1": [1] * 100_001, "port2": [1] * 100_001}}}
    problem(sender.post(body), 413)


def test_100_000_readings_are_taken(sender):
    count = 100_000
    body = {"boot": "a", "taps": {"adc": {"sequence": list(range(count)), "port1": [1] * count, "port2": [2] * count}}}
    answer = sender.send(body)
    assert answer["stored"] == count and answer["through"] == {"adc": count - 1}


def test_other_methods_are_refused(sender):
    response = sender.loop.run_until_complete(sender.client.get("/api/v1/readings"))
    problem(response, 405)
    assert response.headers["allow"] == "POST"


def test_a_body_without_readings_is_answered(sender):
    assert sender.send({"boot": "a", "now": {"uptime_ms": 5}, "taps": {}})["stored"] == 0
    assert sender.send({"taps": {"eom-in": {"port1": [], "port2": []}}})["stored"] == 0


def test_when_the_database_is_away_stations_are_told_to_come_again(sender, monkeypatch):
    sender.send(two_port())

    def away(**options):
        raise psycopg.OperationalError("nobody listens")

    sender.app.door._committer._db.close()
    monkeypatch.setattr(committer, "connect", away)
    response = sender.post(two_port(1))
    problem(response, 503)
    assert int(response.headers["retry-after"]) > 0
    monkeypatch.undo()
    sender.app.door._committer._away_until_s = 0.0
    assert sender.send(two_port(0, 2))["stored"] == 1


def test_when_keys_cannot_be_looked_up_stations_are_told_to_come_again(sender, monkeypatch):
    def away(**options):
        raise psycopg.OperationalError("nobody listens")

    monkeypatch.setattr(keys, "connect", away)
    problem(sender.post(two_port()), 503)


def test_when_too_much_waits_stations_are_told_to_slow_down(sender, monkeypatch):
    monkeypatch.setattr(committer, "MOST_WAITING", -1)
    response = sender.post(two_port())
    problem(response, 429)
    assert int(response.headers["retry-after"]) > 0


def test_a_body_that_the_database_refuses_does_not_take_others_with_it(sender, monkeypatch):
    """The group is committed one by one; the culprit is answered 400, the others 200."""
    true_write = committer.Transaction._write

    def poisoned(self, answers):
        if any(body.boot == "poison" for body in self.bodies):
            raise psycopg.DataError("invalid byte sequence")
        return true_write(self, answers)

    monkeypatch.setattr(committer.Transaction, "_write", poisoned)
    sender.send(two_port(0, 1, boot="first"))
    responses = sender.together([two_port(0, 1, boot=boot) for boot in ("a", "poison", "b", "c")])
    assert [response.status_code for response in responses] == [200, 400, 200, 200]
    assert len(sender.stored()) == 4


def test_a_deleted_station_is_forgotten_and_a_new_one_known(sender):
    sender.send(two_port())
    Station.objects.all().delete()
    sender.app.door.keys.forget()
    problem(sender.post(two_port(1)), 401)
    _, key = add_station("bench-1", None, [NewTap("eom-in", "two-port", "W")])
    sender.client.headers["Authorization"] = f"Bearer {key}"
    assert sender.send(two_port(1))["stored"] == 1


def test_a_tap_deleted_behind_the_doors_back_is_no_5xx(sender):
    sender.send(two_port())
    sender.tap().delete()
    assert sender.post(two_port(1)).status_code in (400, 503)


def test_the_door_writes_down_that_it_is_up(sender):
    sender.send(two_port())
    sender.loop.run_until_complete(sender.app.close())
    up = DoorUp.objects.get()
    assert 0 <= up.until_us - up.from_us < 60 * 10**6
