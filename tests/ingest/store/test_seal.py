"""Readings move from the inbox into blocks and stay the same readings."""

import numpy as np
import pytest
from django.db import connection

from ingest.models import Block, BlockBoot, InboxRow, Tap
from ingest.store.read import DamagedStore, newest_readings, read_many, read_readings
from ingest.store.seal import seal_inbox, seal_tap
from tests.ingest.conftest import EVER, two_port
from tests.ingest.store.test_codec import assert_same

S = 1_000_000
START_US = 1_930_356_000 * S  # a whole number of 600 s


def test_sealing_changes_no_reading(sender):
    for first in (0, 30, 10, 20):
        sender.send(two_port(first, 10, start_us=START_US))
    before = sender.stored()
    assert seal_tap(sender.tap().pk) == 40 and seal_tap(sender.tap().pk) == 0
    assert not InboxRow.objects.exists() and Block.objects.count() == 1
    assert_same(before, sender.stored())


def test_readings_are_sealed_when_they_have_waited(sender):
    sender.send(two_port(0, 5))
    assert seal_inbox() == 0 and seal_inbox(after_s=-1) == 1 and seal_inbox(after_s=-1) == 0


def test_a_tap_with_many_waiting_batches_is_sealed_at_once(sender, monkeypatch):
    monkeypatch.setattr("ingest.store.seal.MANY_ROWS", 2)
    for number in range(3):
        sender.send(two_port(number, 1))
    assert seal_inbox() == 1 and not InboxRow.objects.exists()


def test_sealing_goes_on_step_by_step(sender, monkeypatch):
    monkeypatch.setattr("ingest.store.seal._STEP_ROWS", 2)
    for number in range(7):
        sender.send(two_port(number, 1))
    assert seal_tap(sender.tap().pk) == 7 and sender.stored().sequence.tolist() == list(range(7))


def test_a_late_batch_merges_into_its_block(sender):
    sender.send(two_port(0, 10, start_us=START_US))
    sender.send(two_port(1200, 10, start_us=START_US))
    seal_tap(sender.tap().pk)
    sender.send(two_port(5, 20, start_us=START_US))
    seal_tap(sender.tap().pk)
    blocks = list(Block.objects.order_by("slot_us").values_list("slot_us", "span_us", "count"))
    assert blocks == [(START_US, 600 * S, 25), (START_US + 1200 * S, 600 * S, 10)]
    assert sender.stored().sequence.tolist() == [*range(25), *range(1200, 1210)]
    assert [(row.sequences.lower, row.sequences.upper) for row in BlockBoot.objects.order_by("block__slot_us")] == [
        (0, 25),
        (1200, 1210),
    ]


def test_faster_taps_get_shorter_slots_that_respect_what_is_there(sender):
    sender.send(two_port(0, 400, start_us=START_US))
    seal_tap(sender.tap().pk)
    fast = two_port(1000, 2000)
    fast["taps"]["eom-in"]["at"] = [START_US + 550 * S + 50_000 * number for number in range(2000)]
    sender.send(fast)
    seal_tap(sender.tap().pk)
    spans = list(Block.objects.order_by("slot_us").values_list("slot_us", "span_us"))
    assert spans == [(START_US, 600 * S), (START_US + 600 * S, 300 * S)] and Tap.objects.get(name="eom-in").slot_s == 300
    assert len(sender.stored()) == 2400


def test_a_reader_sees_blocks_and_inbox_as_one(sender):
    sender.send(two_port(0, 10, start_us=START_US))
    seal_tap(sender.tap().pk)
    sender.send(two_port(5, 10, start_us=START_US, boot="other"))
    tap = sender.tap().pk
    stored = read_readings(tap, *EVER)
    assert len(stored) == 20 and (np.diff(stored.at_us) >= 0).all()
    part = read_readings(tap, START_US + 3 * S, START_US + 6 * S)
    assert part.at_us.tolist() == [START_US + second * S for second in (3, 4, 5, 5)]
    assert list(read_readings(tap, *EVER, columns=["port2", "nothing"]).columns) == ["port2"]


def test_reading_many_taps_is_one_query(sender):
    sender.send(two_port(0, 10, start_us=START_US))
    sender.send({"boot": "a", "taps": {"air": {"sequence": [1], "at": [START_US], "temperature_c": [20.0]}}})
    taps = list(Tap.objects.values_list("pk", flat=True))
    asked = []
    true_fetch = read_many.__globals__["fetch"]
    read_many.__globals__["fetch"] = lambda *arguments: asked.append(1) or true_fetch(*arguments)
    try:
        found = read_many(dict.fromkeys(taps, EVER))
    finally:
        read_many.__globals__["fetch"] = true_fetch
    assert len(asked) == 1 and set(found) == set(taps)
    assert {tap: len(readings) for tap, readings in found.items() if len(readings)} == {
        sender.tap().pk: 10,
        sender.tap("air").pk: 1,
    }
    assert len(read_many({})) == 0


@pytest.mark.parametrize("sealed", [0, 10, 20])
def test_the_newest_readings_by_data_time(sender, sealed):
    sender.send(two_port(0, sealed) if sealed else {"taps": {}})
    seal_tap(sender.tap().pk)
    sender.send(two_port(sealed, 20 - sealed) if sealed < 20 else {"taps": {}})
    tap, nothing = sender.tap().pk, sender.tap("air").pk
    assert {key: found.sequence.tolist() for key, found in newest_readings([tap, nothing], count=3).items()} == {
        tap: [17, 18, 19],
        nothing: [],
    }
    assert newest_readings([tap])[tap].sequence.tolist() == [19]


@pytest.mark.parametrize("table", ["ingest_block", "ingest_inboxrow"])
def test_damage_is_named_and_never_read_as_data(sender, table):
    sender.send(two_port(0, 10, start_us=START_US))
    if table == "ingest_block":
        seal_tap(sender.tap().pk)
    with connection.cursor() as cursor:
        cursor.execute(f"UPDATE {table} SET body = set_byte(body, 60, get_byte(body, 60) # 255)")
    with pytest.raises(DamagedStore, match=f"tap {sender.tap().pk}, .*2031-03-04.*restore"):
        sender.stored()


def test_a_damaged_tap_does_not_stop_the_sealing_of_others(sender, caplog):
    sender.send(two_port(0, 10))
    with connection.cursor() as cursor:
        cursor.execute("UPDATE ingest_inboxrow SET crc = crc + 1")
    sender.send({"boot": "a", "taps": {"air": {"sequence": [1], "at": [START_US], "temperature_c": [20.0]}}})
    assert seal_inbox(after_s=-1) == 1 and "sealing_failed" in caplog.text
    assert len(sender.stored("air")) == 1 and InboxRow.objects.count() == 1


def test_a_station_goes_with_all_its_rows(sender):
    sender.send(two_port(0, 10))
    seal_tap(sender.tap().pk)
    sender.send(two_port(10, 10))
    with connection.cursor() as cursor:  # as a raced commit would leave them: nobody collected these rows
        cursor.execute("DELETE FROM ingest_blockboot; DELETE FROM ingest_block; DELETE FROM ingest_tapheard")
        cursor.execute("DELETE FROM ingest_tapboot")
    assert not InboxRow.objects.exists()
    sender.station.delete()
    assert not Block.objects.exists()
