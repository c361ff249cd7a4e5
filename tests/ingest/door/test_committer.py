"""Several web processes commit at once: the same batches from all sides, and sealing between them."""

import threading

import pytest
from django.db import connection

from ingest.models import DoorUp, InboxRow
from ingest.store.seal import seal_inbox
from tests.ingest.conftest import Sender, two_port


@pytest.fixture
def doors(sender):
    """Three doors of the same lab, each with its own connections."""
    others = [Sender(sender.station, sender.key) for _ in range(2)]
    yield [sender, *others]
    for other in others:
        other.close()


def in_threads(*works):
    """Run all at once; the first fault is raised here."""
    faults = []

    def guarded(work):
        try:
            work()
        except BaseException as fault:  # noqa: BLE001  raised again below
            faults.append(fault)
        finally:
            connection.close()

    threads = [threading.Thread(target=guarded, args=(work,)) for work in works]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(60)
    if faults:
        raise faults[0]


@pytest.mark.parametrize("known_by", ["number", "time", "time in several boots"])
def test_the_same_batches_through_several_doors_are_stored_once(doors, known_by):
    answers = []

    def send_all(door):
        for first in range(0, 100, 5):
            body = two_port(first, 12)
            if known_by != "number":
                del body["taps"]["eom-in"]["sequence"]
                body["boot"] = str(doors.index(door)) if known_by == "time in several boots" else None
            answers.append(door.send(body))

    in_threads(*(lambda door=door: send_all(door) for door in doors))
    assert sum(answer["stored"] for answer in answers) == 107
    assert all(answer["stored"] + answer["known"] == 12 and not answer["set_aside"] for answer in answers)
    stored = doors[0].stored()
    assert stored.at_us.tolist() == sorted(set(stored.at_us.tolist())) and len(stored) == 107


def test_several_taps_in_any_order_do_not_lock_one_another_out(doors):
    def body(first, names):
        columns = {"sequence": [first, first + 1], "port1": [1, 2], "port2": [1, 2], "odd": [1, 2]}
        return {"boot": "a", "now": {"uptime_ms": 5}, "taps": dict.fromkeys(names, columns)}

    def send_all(door, names):
        for first in range(0, 60, 2):
            door.send(body(first, names))

    orders = [["eom-in", "adc", "meter"], ["meter", "adc", "eom-in"], ["adc", "eom-in"]]
    in_threads(*(lambda door=door, names=names: send_all(door, names) for door, names in zip(doors, orders, strict=True)))
    assert len(doors[0].stored()) == len(doors[0].stored("adc")) == 60


def test_reading_and_sealing_while_batches_come_in(doors):
    """A reader sees each acknowledged reading exactly once at every moment."""
    done = threading.Event()
    acknowledged = [0]

    def send_all():
        try:
            for number in range(80):
                doors[0].send(two_port(number * 3, 3))
                acknowledged[0] = (number + 1) * 3
        finally:
            done.set()

    def seal():
        while not done.is_set():
            seal_inbox(after_s=-1)

    def read():
        while not done.is_set():
            before = acknowledged[0]
            stored = doors[1].stored()
            assert len(stored) >= before and stored.sequence.tolist() == list(range(len(stored)))

    in_threads(send_all, seal, seal, read)
    seal_inbox(after_s=-1)
    assert not InboxRow.objects.exists() and doors[1].stored().sequence.tolist() == list(range(240))


def test_each_door_writes_down_its_own_presence(doors):
    for door in doors:
        door.send(two_port())
        door.loop.run_until_complete(door.app.close())
    assert DoorUp.objects.count() == 3
