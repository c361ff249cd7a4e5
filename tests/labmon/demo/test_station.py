"""The honest station: sends oldest first, forgets on acknowledgement only, waits longer after each failure."""

from datetime import datetime

import numpy as np
import pytest

from labmon.demo.door import Answer, NoAnswer
from labmon.demo.spool import Spool
from labmon.demo.station import LONGEST_WAIT_S, DemoStation

START_US = 1_930_000_000_000_000


class ScriptedDoor:
    """Answers as told; keeps what was sent."""

    def __init__(self, *answers):
        self.answers, self.sent = list(answers), []

    def send(self, batch):
        self.sent.append(batch)
        answer = self.answers.pop(0) if self.answers else _accepts(batch)
        if isinstance(answer, Exception):
            raise answer
        return answer(batch) if callable(answer) else answer


def _accepts(batch):
    sequence = batch["taps"]["eom-in"]["sequence"]
    return Answer(200, {"accepted": {"ranges": {"eom-in": [[sequence[0], sequence[-1]]]}}, "set_aside": []}, 0.0)


def _station(door, **more):
    said = []
    station = DemoStation(name="n2", tap="eom-in", door=door, firmware="bench board 1.4", started_us=START_US, spool=Spool(100),
                          say=said.append, **more)
    return station, said


def _take(station, first, count):
    at_us = START_US + (first + np.arange(count)) * 1_000_000
    station.take(at_us, {"port1": np.full(count, 990.0), "port2": np.full(count, 1.5)})


def test_a_batch_has_the_form_of_the_contract():
    door = ScriptedDoor()
    station, _ = _station(door, boot="7f3a9c21")
    _take(station, 5, 2)
    station.try_to_send(START_US + 7_500_000)
    assert door.sent == [{"boot": "7f3a9c21", "firmware": "bench board 1.4",
                          "now": {"at": "2031-02-27T23:06:47.500Z", "uptime_ms": 7500},
                          "taps": {"eom-in": {"sequence": [0, 1], "at": [START_US + 5_000_000, START_US + 6_000_000],
                                              "uptime_ms": [5000, 6000], "port1": [990.0, 990.0], "port2": [1.5, 1.5]}}}]
    assert not station.spool.waiting


def test_a_clock_that_is_ahead_stamps_ahead_and_says_so_in_now():
    door = ScriptedDoor()
    station, _ = _station(door, clock_ahead_s=420.0)
    _take(station, 0, 1)
    station.try_to_send(START_US)
    batch = door.sent[0]
    assert batch["taps"]["eom-in"]["at"] == [START_US + 420_000_000]
    assert datetime.fromisoformat(batch["now"]["at"]).timestamp() == pytest.approx(START_US / 1e6 + 420.0)
    assert batch["now"]["uptime_ms"] == 0


def test_nothing_is_forgotten_without_an_answer_and_the_same_batch_comes_again():
    door = ScriptedDoor(NoAnswer("cut off"))
    station, said = _station(door)
    _take(station, 0, 3)
    station.try_to_send(START_US)
    assert len(station.spool.waiting) == 3
    station.try_to_send(START_US + 1000)
    assert len(door.sent) == 1
    station.try_to_send(START_US + 2_000_000)
    assert door.sent[1]["taps"] == door.sent[0]["taps"]
    assert not station.spool.waiting
    assert "3 readings wait" in said[0]


@pytest.mark.parametrize("status", [429, 503, 500])
def test_a_busy_lab_is_given_the_time_it_asks_for(status):
    station, _ = _station(ScriptedDoor(Answer(status, {}, 12.0)))
    _take(station, 0, 1)
    station.try_to_send(START_US)
    assert 0.7 * 12e6 <= station.next_try_us - START_US <= 1.3 * 12e6
    assert len(station.spool.waiting) == 1


def test_waits_grow_to_a_limit():
    station, _ = _station(ScriptedDoor(*[NoAnswer("down")] * 12))
    _take(station, 0, 1)
    waits = []
    for _ in range(12):
        before = station.next_try_us
        station.try_to_send(before)
        waits.append((station.next_try_us - before) / 1e6)
    assert waits[0] < 1.0
    assert 0.7 * LONGEST_WAIT_S <= waits[-1] <= 1.3 * LONGEST_WAIT_S


@pytest.mark.parametrize("status", [401, 403])
def test_a_refused_key_stops_the_station_and_tells_a_person(status):
    door = ScriptedDoor(Answer(status, {}, 0.0))
    station, said = _station(door)
    _take(station, 0, 2)
    station.try_to_send(START_US)
    station.try_to_send(START_US + 3_600_000_000)
    assert len(door.sent) == 1
    assert len(station.spool.waiting) == 2
    assert "key is refused" in said[0]


def test_a_batch_that_is_too_large_is_halved():
    door = ScriptedDoor(Answer(413, {}, 0.0))
    station, _ = _station(door, batch=8)
    _take(station, 0, 8)
    station.try_to_send(START_US)
    assert [len(batch["taps"]["eom-in"]["at"]) for batch in door.sent[:2]] == [8, 4]
    assert not station.spool.waiting


def test_an_unreadable_batch_is_kept_for_a_person_and_the_rest_goes_on():
    door = ScriptedDoor(Answer(400, {"detail": "port2 is missing"}, 0.0))
    station, said = _station(door, batch=2)
    _take(station, 0, 4)
    station.try_to_send(START_US)
    assert [batch["taps"]["eom-in"]["sequence"] for batch in station.refused] == [[0, 1]]
    assert not station.spool.waiting
    assert "port2 is missing" in said[0]


def test_set_aside_readings_are_acknowledged_too():
    def answer(batch):
        return Answer(200, {"accepted": {"ranges": {"eom-in": [[0, 1]]}},
                            "set_aside": [{"tap": "eom-in", "row": 2, "field": "port2", "why": "", "do": ""}]}, 0.0)

    station, _ = _station(ScriptedDoor(answer))
    _take(station, 0, 3)
    station.try_to_send(START_US)
    assert not station.spool.waiting


def test_an_answer_that_acknowledges_nothing_keeps_everything():
    station, _ = _station(ScriptedDoor(Answer(200, {}, 0.0)))
    _take(station, 0, 3)
    station.try_to_send(START_US)
    assert len(station.spool.waiting) == 3
    assert station.next_try_us > START_US


def test_each_power_up_has_its_own_boot():
    assert _station(ScriptedDoor())[0].boot != _station(ScriptedDoor())[0].boot
