"""Readings over WebSocket, through the real web process and, for what that hides, through the bare application."""

import asyncio
import contextlib
import gzip
import itertools
import json

import msgspec
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from websockets.exceptions import ConnectionClosed, InvalidStatus
from websockets.sync.client import connect

from ingest import stream
from ingest.door.refusal import come_again, no_entry
from ingest.models import Station, StationKey
from ingest.stations import add_station, make_key, revoke_key
from ingest.stream import MOST_UNANSWERED, StreamApplication
from tests.ingest.conftest import ALL_KINDS, Sender, two_port
from tests.ingest.door.test_any_input import QUIET, TAPS, any_json, binary_bodies, bodies
from tests.ingest.door.test_over_uvicorn import free_port, server


@contextlib.contextmanager
def opened(port, key, **more):
    with connect(f"ws://127.0.0.1:{port}/api/v1/readings/stream", compression=None, proxy=None,
                 additional_headers={"Authorization": f"Bearer {key}"}, **more) as socket:
        yield socket


def asked(socket, body):
    socket.send(body if isinstance(body, (bytes, str)) else json.dumps(body))
    return json.loads(socket.recv(timeout=20))


@pytest.fixture(scope="module")
def port():
    return free_port()


@pytest.fixture
def web(sender, port):
    with server(port, "labmon.asgi"):
        yield sender


def test_each_batch_is_answered_as_at_the_door(web, port):
    with opened(port, web.key) as socket:
        answer = asked(socket, two_port(0, 5))
        assert answer.pop("server_time") and answer == {
            "stored": 5, "known": 0, "set_aside": [], "accepted": {"boot": "7f3a", "ranges": {"eom-in": [[0, 4]]}},
            "through": {"eom-in": 4}}
        assert asked(socket, two_port(3, 4))["known"] == 2
        assert asked(socket, msgspec.msgpack.encode(two_port(7, 3)))["stored"] == 3
        assert asked(socket, json.dumps(two_port(10, 1)).encode())["stored"] == 1
        assert asked(socket, gzip.compress(msgspec.msgpack.encode(two_port(11, 1))))["through"] == {"eom-in": 11}
        aside = asked(socket, two_port(12, 2, port2=[None, 1e-6]))
        assert aside["stored"] == 1 and aside["set_aside"][0]["field"] == "port2" and aside["through"] == {"eom-in": 13}
        body = two_port(0, 1)
        body["taps"]["eom-in"]["port2"] = []
        for bad, status in ((b"{", 400), ("no", 400), (b"", 400), (body, 400), (b"[1]", 400), (" " * (9 << 20), 413)):
            assert asked(socket, bad)["status"] == status
        assert asked(socket, two_port(14, 1))["stored"] == 1
    assert web.stored().sequence.tolist() == [*range(12), 13, 14]


def test_answers_come_in_the_order_sent_also_when_many_wait(web, port):
    with opened(port, web.key) as socket:
        for number in range(100):
            socket.send(json.dumps(two_port(number * 10, 10)) if number % 7 else "{")
        answers = [json.loads(socket.recv(timeout=20)) for _ in range(100)]
    assert [answer.get("status", answer.get("accepted", {}).get("ranges")) for answer in answers] == [
        {"eom-in": [[number * 10, number * 10 + 9]]} if number % 7 else 400 for number in range(100)]


@pytest.mark.parametrize(("header", "says"), [({}, "needed"), ({"Authorization": "Bearer nobody"}, "not known")])
def test_no_key_no_handshake(web, port, header, says):
    with pytest.raises(InvalidStatus) as caught:
        connect(f"ws://127.0.0.1:{port}/api/v1/readings/stream", additional_headers=header, proxy=None)
    answer = caught.value.response
    problem = json.loads(answer.body)
    assert answer.status_code == problem["status"] == 401 and says in problem["title"] and problem["detail"]
    assert answer.headers["WWW-Authenticate"].startswith("Bearer")
    assert answer.headers["Content-Type"] == "application/problem+json"


def ask_for_ever(socket, answers):
    for number in itertools.count(1):
        answers.append(asked(socket, two_port(number)))


def test_a_revoked_key_closes_idle_and_busy_connections(web, port):
    key = make_key(web.station)
    with opened(port, key) as idle, opened(port, key) as busy, opened(port, web.key) as other:
        assert asked(busy, two_port())["stored"] == 1
        revoke_key(StationKey.objects.get(hint=key[:4]).pk)
        answers = []
        with pytest.raises(ConnectionClosed) as caught:
            ask_for_ever(busy, answers)
        assert caught.value.rcvd.code == 4401 and caught.value.rcvd.reason == "the key was revoked"
        assert {answer.get("status") for answer in answers[:-1]} <= {None} and answers[-1].get("status") in (None, 401)
        with pytest.raises(ConnectionClosed) as caught:
            idle.recv(timeout=10)
        assert (caught.value.rcvd.code, caught.value.rcvd.reason) == (4401, "the key was revoked")
        assert asked(other, two_port(10_000))["stored"] == 1


def test_a_message_beyond_the_servers_limit_closes_with_1009(web, port):
    """A client that is still writing may see the connection break before it reads the close code."""
    with opened(port, web.key) as socket, pytest.raises(ConnectionClosed) as caught:
        asked(socket, b" " * (17 << 20))
    assert caught.value.rcvd is None or caught.value.rcvd.code == 1009
    with opened(port, web.key) as socket:
        assert asked(socket, two_port())["stored"] == 1


def test_a_killed_server_leaves_what_it_answered(sender, port):
    answered = 0
    with server(port, "labmon.asgi") as process, opened(port, sender.key) as socket:
        with contextlib.suppress(ConnectionClosed):
            for number in range(10_000):
                assert asked(socket, two_port(number * 10, 10))["stored"] == 10
                answered += 10
                if number == 20:
                    process.kill()
    assert 210 <= answered <= len(sender.stored()) <= answered + 10


class SlowDoor:
    """A door that answers when it is told to."""

    def __init__(self):
        self.free, self.taken, self.refusal, self.key_refusal = asyncio.Event(), 0, None, None

    async def station_of(self, key):
        if self.key_refusal is not None:
            raise self.key_refusal

    async def take(self, body, form, key, remote_address):
        self.taken += 1
        await self.free.wait()
        if self.refusal is not None:
            raise self.refusal
        return {"stored": 1}


class Wire:
    """An ASGI server's side of one connection."""

    def __init__(self, door, messages):
        self.messages, self.sent, self.read = messages, [], 0
        self.scope = {"type": "websocket", "headers": [(b"authorization", b"Bearer k")], "client": ("192.0.2.1", 1)}
        self.running = asyncio.create_task(StreamApplication(door)(self.scope, self.receive, self.send))

    async def receive(self):
        if self.read > len(self.messages):
            await asyncio.Event().wait()
        self.read += 1
        return {"type": "websocket.connect"} if self.read == 1 else self.messages[self.read - 2]

    async def send(self, message):
        self.sent.append(message)


async def settled():
    for _ in range(200):
        await asyncio.sleep(0)


def text(size=1):
    return {"type": "websocket.receive", "text": "x" * size}


@pytest.mark.parametrize(("size", "most"), [(1, MOST_UNANSWERED), (6 << 20, 3)])
async def test_nothing_more_is_read_while_too_much_is_unanswered(size, most):
    door = SlowDoor()
    wire = Wire(door, [text(size)] * 100 + [{"type": "websocket.disconnect", "code": 1000}])
    await settled()
    assert door.taken == most and wire.read == 1 + most
    door.free.set()
    await wire.running
    assert door.taken == 100 and [message["type"] for message in wire.sent[1:]] == ["websocket.send"] * (len(wire.sent) - 1)


async def test_what_was_read_is_committed_though_the_station_hangs_up():
    door = SlowDoor()
    wire = Wire(door, [text(), {"type": "websocket.disconnect", "code": 1006}])
    await settled()
    assert not wire.running.done()
    door.free.set()
    await wire.running
    assert len(wire.sent) == 1


@pytest.mark.parametrize("refusal", [come_again(503, "the database is away", 5), come_again(429, "too many", 2)])
async def test_a_passing_refusal_is_answered_and_the_connection_stays(refusal):
    door = SlowDoor()
    door.refusal = refusal
    door.free.set()
    wire = Wire(door, [text()])
    await settled()
    assert json.loads(wire.sent[1]["text"])["status"] == refusal.status and not wire.running.done()
    wire.running.cancel()


async def test_a_fault_of_ours_closes_with_1011_and_says_what_to_do(caplog):
    door = SlowDoor()
    door.refusal = ZeroDivisionError()
    door.free.set()
    wire = Wire(door, [text()])
    await wire.running
    assert wire.sent[-1]["code"] == 1011 and "repeat" in wire.sent[-1]["reason"] and "stream_failed" in caplog.text


async def test_the_key_is_looked_at_again_while_nothing_comes(monkeypatch):
    monkeypatch.setattr(stream, "LOOK_AGAIN_S", 0.0)
    door = SlowDoor()
    wire = Wire(door, [])
    door.key_refusal = None
    await settled()
    door.key_refusal = come_again(503, "the database is away", 5)
    await settled()
    assert not wire.running.done()
    door.key_refusal = no_entry("the key has expired", "Use another.")
    await wire.running
    assert wire.sent[-1] == {"type": "websocket.close", "code": 4401, "reason": "the key has expired"}


async def test_a_handshake_is_refused_by_closing_where_the_server_knows_no_other_way():
    door = SlowDoor()
    door.key_refusal = no_entry("the key is not known", "Use another.")
    wire = Wire(door, [])
    await wire.running
    assert wire.sent == [{"type": "websocket.close", "code": 4401, "reason": "the key is not known"}]


@pytest.fixture(scope="module")
def fuzzed(django_db_setup, django_db_blocker):
    """One station, one web process and one connection for all examples."""
    with django_db_blocker.unblock():
        station, key = add_station("fuzzed", None, ALL_KINDS)
        reader, port = Sender(station, key), free_port()
        with server(port, "labmon.asgi"), opened(port, key) as socket:
            yield reader, socket
        reader.close()
        Station.objects.all().delete()


def looked_at(reader, answer):
    """Never a fault of ours, never a stored NaN or infinity where a value is needed."""
    assert answer.get("status") in (None, 400, 413), answer
    for name in TAPS:
        stored = reader.stored(name)
        needed = {"port2"} if name == "dark" else {"port1", "port2"}
        for column, values in stored.columns.items():
            assert not np.isinf(values).any() and not (column in needed and np.isnan(values).any())


@settings(QUIET, max_examples=60)
@given(body=bodies | any_json)
def test_any_json_text(fuzzed, body):
    reader, socket = fuzzed
    looked_at(reader, asked(socket, json.dumps(body)))


packed = binary_bodies().map(msgspec.msgpack.encode)
texts = any_json.map(lambda found: json.dumps(found).encode())


@settings(QUIET, max_examples=60)
@given(body=st.binary(max_size=200) | packed | texts, is_packed=st.booleans())
def test_any_bytes(fuzzed, body, is_packed):
    reader, socket = fuzzed
    looked_at(reader, asked(socket, gzip.compress(body) if is_packed else body))
