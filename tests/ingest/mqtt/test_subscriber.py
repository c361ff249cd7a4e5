"""Readings over MQTT: a real broker, the real subscriber in its own process, answers after the commit."""

import gzip
import json
import queue
import signal

import msgspec
import paho.mqtt.client as paho
import pytest
from django.db import connection

from ingest.models import DoorUp, SetAside, Station, StationKey, TapBoot
from ingest.stations import revoke_key
from ingest.store.read import read_readings
from tests.faults.figures import balance_of, note_fault
from tests.ingest.conftest import EVER, two_port
from tests.ingest.mqtt.conftest import Bench, SubscriberProcess, until


def test_each_message_is_answered_as_at_the_door(sender, bench, subscriber):
    answer = bench.ask(two_port(0, 5))
    assert answer.pop("server_time") and answer == {
        "stored": 5, "known": 0, "set_aside": [], "accepted": {"boot": "7f3a", "ranges": {"eom-in": [[0, 4]]}},
        "through": {"eom-in": 4}}
    assert sender.send(two_port(0, 7))["known"] == 5
    assert bench.ask(msgspec.msgpack.encode(two_port(5, 5)))["known"] == 2
    assert bench.ask(gzip.compress(json.dumps(two_port(10, 1)).encode()))["through"] == {"eom-in": 10}
    aside = bench.ask(two_port(11, 2, port2=[None, 1e-6]))
    assert aside["stored"] == 1 and aside["set_aside"][0]["field"] == "port2" and aside["through"] == {"eom-in": 12}
    assert sender.stored().sequence.tolist() == [*range(11), 12]
    assert not DoorUp.objects.exclude(process=DoorUp.objects.first().process).exists()


def test_what_cannot_be_decoded_is_kept_answered_and_acknowledged_once(sender, bench, subscriber, broker):
    body = two_port(0, 2)
    body["taps"]["eom-in"]["port2"] = [1e-6]
    for bad, field in ((b"{", None), (b"\x80\x80", None), (body, "taps.eom-in.port2"), (b"{", None), (b"", None)):
        answer = bench.ask(bad)
        assert (answer["status"], answer.get("field")) == (400, field) and answer["title"] and answer["detail"]
    assert bench.ask(b" " * (9 << 20))["status"] == 413
    rows = list(SetAside.objects.order_by("pk"))
    assert [row.reading["bytes"] for row in rows] == [1, 2, len(json.dumps(body)), 0, 9 << 20]
    assert [row.reading["is_whole"] for row in rows] == [True] * 4 + [False]
    assert rows[0].reading["message_base64"] == "ew==" and rows[2].field == "taps.eom-in.port2" and rows[2].tap is None
    assert bench.ask(two_port(2, 1))["through"] == {}, "what was refused holds the end of the unbroken range back"
    subscriber.stop()
    again = SubscriberProcess(broker)
    assert bench.ask(two_port(3, 1))["stored"] == 1 and bench.answers.empty()
    again.stop()


def test_mqtt_5_has_its_correlation_data_given_back(sender, broker, subscriber):
    bench = Bench(broker, sender.station.name, sender.key, paho.MQTTv5).ready()
    for number in range(3):
        bench.publish(two_port(number), mark=b"batch %d" % number)
    found = [bench.answers.get(timeout=20) for _ in range(3)]
    assert [message.properties.CorrelationData for message in found] == [b"batch 0", b"batch 1", b"batch 2"]
    bench.close()


def test_the_broker_lets_a_station_do_its_own_things_only(sender, bench, broker, subscriber):
    """Its key opens; another's topic is closed, and nobody comes in without a key."""
    stranger = Bench(broker, sender.station.name, "no key")
    assert stranger.connected.get(timeout=10).is_failure
    stranger.close()
    listener = Bench(broker, sender.station.name, sender.key).ready()
    listener.client.subscribe("labmon/v1/+/readings", 1)
    bench.publish(two_port(0), topic="labmon/v1/other/readings")
    bench.publish(two_port(0), topic=f"labmon/v1/{bench.station}/answer")
    assert bench.ask(two_port(1))["stored"] == 1
    heard = listener.answers.get(timeout=10)
    assert heard.topic.endswith("/answer") and json.loads(heard.payload)["stored"] == 1 and listener.answers.empty()
    listener.close()


def test_a_revoked_key_is_out_within_seconds_and_its_messages_are_refused(sender, bench, broker, subscriber):
    assert bench.ask(two_port(0))["stored"] == 1
    revoke_key(StationKey.objects.get().pk)
    until(lambda: sender.station.name not in (broker.folder / "passwords").read_text())
    until(lambda: not bench.client.is_connected())
    late = Bench(broker, sender.station.name, sender.key)
    assert late.connected.get(timeout=10).is_failure
    late.close()


def test_the_last_will_is_a_hint_on_which_nothing_is_judged(sender, bench, broker, subscriber):
    dying = Bench(broker, sender.station.name, sender.key, will=b"").ready()
    dying.client.socket().close()
    lost_at = until(lambda: Station.objects.get().link_lost_at)
    assert bench.ask(two_port(0))["stored"] == 1
    assert Station.objects.get().link_lost_at == lost_at and not DoorUp.objects.exists()
    dying.client.loop_stop()


def test_several_subscribers_divide_the_messages(sender, bench, broker, subscriber):
    other = SubscriberProcess(broker, "two")
    for number in range(40):
        bench.publish(two_port(number))
    answers = [bench.answer() for _ in range(40)]
    assert sum(answer["stored"] for answer in answers) == 40 and bench.answers.empty()
    shares = [broker.sent_to("labmon-one"), broker.sent_to("labmon-two")]
    assert sum(shares) == 40 and min(shares) >= 10, shares
    other.stop()


def test_a_database_that_is_away_for_a_while_delays_the_answer_only(sender, bench, subscriber):
    """Its connections are cut while messages come: each is answered, none twice stored."""
    for number in range(30):
        bench.publish(two_port(number))
        if number % 10 == 5:
            with connection.cursor() as cursor:
                cursor.execute("SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE pid <> pg_backend_pid() "
                               "AND datname = current_database() AND application_name = 'labmon'")
    answers = [bench.answer() for _ in range(30)]
    assert {answer.get("status") for answer in answers} == {None}
    assert sender.stored().sequence.tolist() == list(range(30))


@pytest.mark.slow
def test_killed_between_receipt_and_commit_the_message_comes_again(sender, bench, broker, subscriber):
    """The commit is held up by a lock; the subscriber dies; the station does nothing, and yet all is stored once."""
    assert bench.ask(two_port(0))["stored"] == 1
    with connection.cursor() as cursor:
        cursor.execute("BEGIN")
        cursor.execute("SELECT 1 FROM ingest_tapboot FOR UPDATE")
        for number in range(1, 6):
            bench.publish(two_port(number))
        until(lambda: _waits_for_lock(cursor))
        subscriber.process.send_signal(signal.SIGKILL)
        subscriber.process.wait(10)
        cursor.execute("COMMIT")
    assert len(sender.stored()) == 1
    with pytest.raises(queue.Empty):
        bench.answer(timeout=0.5)
    again = SubscriberProcess(broker)
    answers = [bench.answer() for _ in range(5)]
    assert [answer["stored"] for answer in answers] == [1] * 5 and answers[-1]["through"] == {"eom-in": 5}
    assert sender.stored().sequence.tolist() == list(range(6))
    again.stop()


def _waits_for_lock(cursor):
    cursor.execute("SELECT count(*) FROM pg_stat_activity WHERE wait_event_type = 'Lock' AND application_name = 'labmon'")
    return cursor.fetchone()[0]


class Keeper:
    """A bench that keeps each reading until it is named in an answer, and repeats what is left."""

    def __init__(self, bench):
        self.bench, self.kept = bench, {}

    def measure(self, numbers):
        for number in numbers:
            self.kept[number] = two_port(number)
            self.bench.publish(self.kept[number])

    def hear(self, count):
        for _ in range(count):
            for first, last in self.bench.answer()["accepted"]["ranges"]["eom-in"]:
                for number in range(first, last + 1):
                    self.kept.pop(number, None)


@pytest.mark.slow
def test_a_broker_killed_hard_loses_what_it_took_and_the_bench_has_it_still(sender, bench, broker, subscriber):
    """Default settings: the broker acknowledged 50 messages, none of which it has after its death."""
    station = Keeper(bench)
    station.measure(range(10))
    station.hear(10)
    assert not station.kept
    subscriber.stop()
    station.measure(range(10, 60))  # each has the broker's acknowledgement, and no answer
    assert list(station.kept) == list(range(10, 60))
    broker.kill()
    broker.start()
    bench.ready()
    again = SubscriberProcess(broker)
    station.measure([60])
    station.hear(1)
    assert sender.stored().sequence.tolist() == [*range(10), 60], "the broker kept nothing"
    assert list(station.kept) == list(range(10, 60))
    station.measure(list(station.kept))
    station.hear(50)
    found = sorted(sender.stored().sequence.tolist())
    note_fault("MQTT broker kill -9", "it lost 50 messages that it had acknowledged", balance_of(range(61), found),
               recovered="with the bench's repeat", also="identities compared")
    assert not station.kept and found == list(range(61))
    again.stop()


@pytest.mark.slow
def test_killed_at_any_moment_every_message_is_stored_once(sender, bench, broker):
    """Ten subscribers killed in turn under load: the broker gives each unacknowledged message to the next."""
    sent = 0
    for life in range(10):
        subscriber = SubscriberProcess(broker)
        for _ in range(60):
            bench.publish(two_port(sent * 10, 10))
            sent += 1
            if _ == 10 + 5 * life:
                subscriber.process.kill()
        subscriber.process.wait(10)
    last = SubscriberProcess(broker)
    until(lambda: len(sender.stored()) == 10 * sent, within_s=60)
    last.stop()
    stored = sender.stored()
    rows = list(zip(stored.sequence.tolist(), stored.column("port1").tolist(), stored.column("port2").tolist(), strict=True))
    made = two_port(0, 10 * sent)["taps"]["eom-in"]
    balance = balance_of(zip(made["sequence"], made["port1"], made["port2"], strict=True), rows)
    note_fault("MQTT subscriber kill -9", "ten subscribers in turn, under load", balance, recovered="by the next subscriber")
    assert balance.is_exact and stored.sequence.tolist() == list(range(10 * sent))
    tap = TapBoot.objects.get().tap_id
    assert len(read_readings(tap, *EVER)) == 10 * sent


def test_who_the_broker_turned_away_stands_on_the_joining_slip(sender, broker, subscriber):
    """A wrong key, then a name that is no station: the broker tells neither, only whence they came."""
    from labmon.benches.models import DoorRefusal

    for station, key in ((sender.station.name, "a wrong key"), ("nobody", sender.key)):
        bench = Bench(broker, station, key)
        assert bench.connected.get(timeout=10).is_failure
        bench.close()
    row = until(lambda: DoorRefusal.objects.filter(count__gte=2).first())
    assert (row.title, row.remote_address, row.station, row.hint) == ("the broker turned it away", "127.0.0.1", None, "")
