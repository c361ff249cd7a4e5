"""The broker's files follow from the keys in force."""

import os
import signal
from datetime import timedelta

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext
from django.utils import timezone

from ingest.broker_hash import is_hash_of
from ingest.models import StationKey
from ingest.mqtt.access import write_access
from ingest.mqtt.address import BrokerAddress
from ingest.stations import add_station, digest_of, make_key, revoke_key

pytestmark = pytest.mark.django_db
OWN = BrokerAddress("localhost", 1883, "labmon.door", "secret", False)


def passwords(folder):
    return dict(line.split(":", 1) for line in (folder / "passwords").read_text().splitlines())


def test_stations_have_their_newest_key_in_force_as_password(tmp_path):
    station, first = add_station("bench-1")
    _, other = add_station("bench-2")
    assert write_access(tmp_path, OWN, None)
    found = passwords(tmp_path)
    assert set(found) == {"labmon.door", "bench-1", "bench-2"}
    assert is_hash_of(found["labmon.door"], "secret")
    assert is_hash_of(found["bench-1"], first) and is_hash_of(found["bench-2"], other)
    second = make_key(station)
    write_access(tmp_path, OWN, None)
    assert is_hash_of(passwords(tmp_path)["bench-1"], second)
    revoke_key(StationKey.objects.get(digest=digest_of(second)).pk)
    write_access(tmp_path, OWN, None)
    assert is_hash_of(passwords(tmp_path)["bench-1"], first)
    StationKey.objects.filter(station=station).update(expires_at=timezone.now() - timedelta(seconds=1))
    StationKey.objects.exclude(station=station).update(broker_hash="")  # made before labmon knew MQTT
    write_access(tmp_path, OWN, None)
    assert set(passwords(tmp_path)) == {"labmon.door"}


def test_nothing_is_written_or_said_where_nothing_changed(tmp_path):
    add_station("bench-1")
    calls = []
    signal.signal(signal.SIGHUP, lambda *_: calls.append(1))
    try:
        (tmp_path / "pid").write_text(f"{os.getpid()}\n")
        assert write_access(tmp_path, OWN, tmp_path / "pid") and not write_access(tmp_path, OWN, tmp_path / "pid")
        assert calls == [1]
    finally:
        signal.signal(signal.SIGHUP, signal.SIG_DFL)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["passwords", "pid", "rules"]


def test_a_broker_that_is_not_there_is_a_warning(tmp_path, caplog):
    assert write_access(tmp_path, OWN, tmp_path / "none") and "broker_not_told" in caplog.text


def test_a_new_password_of_our_own_is_written(tmp_path):
    write_access(tmp_path, OWN, None)
    assert write_access(tmp_path, BrokerAddress("localhost", 1883, "labmon.door", "other", False), None)
    assert is_hash_of(passwords(tmp_path)["labmon.door"], "other")


def test_one_query_for_any_number_of_stations(tmp_path):
    counts = []
    for number in range(4):
        add_station(f"bench-{number}")
        with CaptureQueriesContext(connection) as queries:
            write_access(tmp_path, OWN, None)
        counts.append(len(queries))
    assert counts == [1] * 4


def test_the_rules_let_a_station_do_its_own_things(tmp_path):
    write_access(tmp_path, OWN, None)
    lines = (tmp_path / "rules").read_text().splitlines()
    assert "pattern write labmon/v1/%u/readings" in lines and "pattern read labmon/v1/%u/answer" in lines
    assert lines[0] == "user labmon.door" and "topic write labmon/v1/+/answer" in lines
