"""From the spool to the real door: each reading once, whatever fails on the way (CONTRACT 1)."""

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from labmon_bench import sender as sender_module
from labmon_bench.reading import Reading

from ingest.models import SetAside, StationBoot
from ingest.stations import NewTap, add_tap
from tests.clients.bench.conftest import START_US, readings, send_all


def test_what_was_kept_arrives_once_with_its_values(store, bench_sender, sender):
    store.keep(readings(1000))
    send_all(bench_sender)
    stored = sender.stored()
    assert stored.sequence.tolist() == list(range(1000)) and stored.at_us.tolist() == [START_US + 10**6 * n for n in range(1000)]
    assert stored.column("port1").tolist() == [1e-3 + 1e-9 * number for number in range(1000)]
    assert store.waiting == 0 and bench_sender.tally.stored == 1000
    boot = StationBoot.objects.get()
    assert boot.boot == store.boot.name and boot.firmware.startswith("labmon-bench ")


def test_lost_answers_and_a_door_away_neither_lose_nor_double(store, bench_sender, sender, door):
    store.keep(readings(50))
    door.faults = ["away", "answer lost", "", "answer lost", "away"]
    bench_sender.most = 10
    waits_s = []
    while store.waiting:
        waits_s.append(bench_sender.turn())
    stored = sender.stored()
    assert stored.sequence.tolist() == list(range(50)) and bench_sender.tally.known > 0
    assert sum(wait > 0.0 for wait in waits_s) >= 4 and SetAside.objects.count() == 0


@settings(max_examples=15, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(st.sampled_from(["", "away", "answer lost"]), max_size=12), st.integers(1, 40), st.integers(1, 30))
def test_any_course_of_faults_ends_with_each_reading_once(store, bench_sender, sender, door, faults, count, most):
    before = bench_sender.tally.stored
    store.keep(readings(count))
    door.faults, bench_sender.most = list(faults), most
    send_all(bench_sender)
    numbers = sorted(sender.stored().sequence.tolist())
    assert numbers == list(range(len(numbers))) and bench_sender.tally.stored - before <= count and not store.waiting


def test_only_what_is_acknowledged_is_forgotten(store, bench_sender, door, monkeypatch):
    """An answer that leaves numbers out, or speaks of another boot, frees nothing more."""
    store.keep(readings(10))
    true_post = door.post

    def post(content, headers, key):
        answer = true_post(content, headers, key)
        answer.said["accepted"]["ranges"]["eom-in"] = [[2, 4], [7, 7]]
        return answer

    monkeypatch.setattr(door, "post", post)
    assert bench_sender.turn() > 0.0 and store.waiting == 6 and "not acknowledged" in bench_sender.tally.trouble
    assert sum(len(part.sequence) for part in store.next_batch(100).columns) == 6


@pytest.mark.parametrize("said", [None, [], {"accepted": None}, {"accepted": {"boot": "other", "ranges": {"eom-in": [[0, 9]]}}},
                                  {"accepted": {"ranges": 5}}, "<html>"])
def test_an_answer_of_another_form_frees_nothing(store, bench_sender, door, monkeypatch, said):
    """A proxy in between may answer 200 with a page of its own."""
    from labmon_bench.door import DoorAnswer

    store.keep(readings(10))
    monkeypatch.setattr(door, "post", lambda *_: DoorAnswer(200, said, "", 0.0))
    assert bench_sender.turn() > 0.0 and store.waiting == 10 and bench_sender.tally.trouble


def test_two_taps_with_other_columns_go_in_one_message(store, bench_sender, sender, door):
    for number in range(5):
        store.keep(readings(1, number))
        store.keep([Reading("air", START_US + number, None, {"temperature_c": 21.0 + number})])
    bench_sender.turn()
    assert len(door.posted) == 1 and store.waiting == 0
    assert sender.stored("air").column("temperature_c").tolist() == [21.0, 22.0, 23.0, 24.0, 25.0]


def test_a_value_that_the_source_lacked_is_sent_as_such_and_set_aside(store, bench_sender, sender):
    store.keep([Reading("eom-in", START_US, 1, {"port1": 1e-3, "port2": None}), *readings(1, 1)])
    bench_sender.turn()
    assert store.waiting == 0 and sender.stored().sequence.tolist() == [1] and bench_sender.tally.set_aside == 1
    assert "null" in SetAside.objects.get().why


def test_columns_of_an_older_clients_health_are_kept_with_the_reading(store, bench_sender, sender):
    store.keep([*readings(3), *readings(1, 3, more={"client_waiting": 3, "client_clock": "synchronized"})])
    send_all(bench_sender)
    assert sender.stored().sequence.tolist() == [0, 1, 2, 3]
    assert sender.tap().unknown_columns == []


def test_the_clients_health_is_told_now_and_then_and_at_once_when_a_source_falls_mute(store, door, sender, monkeypatch):
    told = {"waiting": 3, "dropped": 0, "restarts": 1, "clock": "synchronized", "mute": []}
    noted = []
    monkeypatch.setattr("ingest.door.asgi.note_told", lambda station_id, health: noted.append(health))
    client = sender_module.Sender(store, door, lambda: sender.key, 0.5, told=lambda: told)
    store.keep(readings(3))
    door.faults = ["away"]
    client.turn()
    client.turn()
    assert (noted[0].waiting, noted[0].restarts, noted[0].clock, noted[0].mute) == (3, 1, "synchronized", ())
    store.keep(readings(3, 3))
    client.turn()
    client.turn()
    assert len(noted) == 1 and len(door.posted) == 2
    told["mute"] = ["eom-in"]
    client.turn()
    assert noted[1].mute == ("eom-in",) and len(door.posted) == 3


def test_a_tap_that_the_station_lacks_does_not_hold_up_the_others(store, bench_sender, sender):
    store.keep([*readings(3), *readings(3, tap="new")])
    send_turns = [bench_sender.turn() for _ in range(3)]
    assert store.waiting == 3 and len(sender.stored()) == 3 and send_turns
    add_tap(sender.station, NewTap("new", "two-port", "W"))
    assert store.next_batch(100) is not None
    bench_sender._held.clear()
    send_all(bench_sender)
    assert len(sender.stored("new")) == 3


def test_columns_that_the_tap_lacks_do_not_hold_up_later_settings(store, bench_sender, sender):
    """Readings without port2 are refused whole; once the settings are right, the new ones go though the old ones wait."""
    store.keep([Reading("eom-in", START_US, 1, {"port1": 1e-3})])
    bench_sender.turn()
    store.keep(readings(3, 1))
    bench_sender.turn()
    assert len(sender.stored()) == 3 and store.waiting == 1


def test_a_refused_key_is_not_tried_again_until_it_changes(store, bench_sender, sender, door):
    store.keep(readings(3))
    keys = ["wrong"]
    bench_sender.key = lambda: keys[0]
    assert bench_sender.turn() > 0.0 and "key" in bench_sender.tally.trouble and len(door.posted) == 1
    for _ in range(5):
        bench_sender.turn()
    assert len(door.posted) == 1 and store.waiting == 3
    keys[0] = sender.key
    bench_sender.turn()
    assert store.waiting == 0 and bench_sender.tally.trouble == ""


def test_too_large_a_body_is_halved(store, bench_sender, sender, monkeypatch):
    monkeypatch.setattr("ingest.door.asgi.LARGEST_BODY", 3_000)
    monkeypatch.setattr("labmon_bench.message._PACKED_FROM_BYTES", 10**9)
    store.keep(readings(500))
    send_all(bench_sender)
    assert sender.stored().sequence.tolist() == list(range(500)) and bench_sender.most < 500


def test_an_overburdened_door_is_given_the_time_it_asks_for(store, bench_sender, door, monkeypatch):
    from labmon_bench.door import DoorAnswer

    store.keep(readings(3))
    monkeypatch.setattr(door, "post", lambda *_: DoorAnswer(503, {"title": "too much waits", "detail": "later"}, "", 7.0))
    waits_s = [bench_sender.turn() for _ in range(12)]
    assert min(waits_s) >= 7.0 and max(waits_s) <= 7.0 + sender_module.LONGEST_WAIT_S and waits_s[-1] > waits_s[0]
    assert len(set(waits_s)) == len(waits_s) and store.waiting == 3


def test_a_client_with_nothing_to_send_is_heard_all_the_same(store, bench_sender, door, monkeypatch):
    """An instrument that is mute is not a station that is silent."""
    assert bench_sender.turn() == 0.5 and not door.posted
    monkeypatch.setattr(sender_module, "HEARTBEAT_S", 0.0)
    bench_sender.turn()
    boot = StationBoot.objects.get()
    assert boot.boot == store.boot.name and boot.clock_offset_us is not None and abs(boot.clock_offset_us) < 10_000_000


def test_readings_of_an_earlier_power_up_are_placed_by_their_stamps(tmp_path, bench_sender, store, sender, door):
    """After the PC restarts its uptime begins anew: ``now.uptime_ms`` must not be compared with the old readings' uptimes."""
    from dataclasses import replace

    store.boot = replace(store.boot, name="before", power_up="id another")
    store.keep(readings(3))
    door.faults = ["answer lost"]
    send_all(bench_sender)
    stored = sender.stored()
    assert stored.at_us.tolist() == [START_US + 10**6 * n for n in range(3)] and SetAside.objects.count() == 0
    assert stored.column("uptime_ms").tolist() == [0.0, 1000.0, 2000.0]
