"""The browser's socket on the real channel layer: what changed, conflated, with a beat; nothing for strangers."""

import asyncio
import time

import pytest
from channels.db import database_sync_to_async
from channels.layers import get_channel_layer
from channels.routing import URLRouter
from channels.testing import WebsocketCommunicator
from django.contrib.auth.models import AnonymousUser

from labmon.live import consumers
from labmon.live.publish import LAB_GROUP
from labmon.live.routing import websocket_urlpatterns
from labmon.people.models import Person, Role
from tests.factories import make_person

pytestmark = pytest.mark.django_db(transaction=True)


async def opened(person) -> WebsocketCommunicator:
    """A socket of ``person`` that is let in."""
    socket = WebsocketCommunicator(URLRouter(websocket_urlpatterns), "/live/")
    socket.scope["user"] = person
    is_in, _ = await socket.connect()
    assert is_in
    return socket


async def changes(socket: WebsocketCommunicator, seconds: float = 1.5) -> list[dict]:
    """Messages with changes that arrive within ``seconds``; beats are left out."""
    found, until = [], time.monotonic() + seconds
    while (left := until - time.monotonic()) > 0:
        if not await socket.receive_nothing(timeout=min(left, 0.05)):
            message = await socket.receive_json_from()
            if "changed" in message:
                found.append(message["changed"])
    return found


async def send(kind: str, *ids: int) -> None:
    await get_channel_layer().group_send(LAB_GROUP, {"type": "lab.changed", "change": {"kind": kind, "ids": list(ids)}})


async def test_a_change_arrives_with_its_ids():
    socket = await opened(await database_sync_to_async(make_person)(Role.RESEARCHER))
    await socket.receive_json_from()
    await send("alarm", 7)
    assert (await socket.receive_json_from(timeout=2))["changed"] == {"alarm": [7]}
    await socket.disconnect()


async def test_many_changes_become_few_messages_and_none_is_lost():
    socket = await opened(await database_sync_to_async(make_person)(Role.RESEARCHER))

    async def flood():
        for tap in range(200):
            await send("tap", tap)
            await asyncio.sleep(0.005)

    started = time.monotonic()
    found, _ = await asyncio.gather(changes(socket, 2.5), flood())
    took = time.monotonic() - started
    assert len(found) <= 2 * took + 1
    assert {tap for changed in found for tap in changed["tap"]} == set(range(200))
    await socket.disconnect()


async def test_a_guest_learns_that_something_changed_but_not_what():
    socket = await opened(await database_sync_to_async(make_person)(Role.GUEST))
    await send("alarm", 7)
    assert await changes(socket, 0.5) == [{"alarm": []}]
    await socket.disconnect()


async def test_too_many_ids_mean_any():
    socket = await opened(await database_sync_to_async(make_person)(Role.MANAGER))
    await send("tap", *range(consumers.MOST_IDS + 1))
    assert await changes(socket, 0.5) == [{"tap": []}]
    await socket.disconnect()


@pytest.mark.parametrize("ended", [True, False])
async def test_who_may_not_watch_is_told_4401(ended):
    person = await database_sync_to_async(make_person)(Role.GUEST, is_active=False) if ended else AnonymousUser()
    socket = WebsocketCommunicator(URLRouter(websocket_urlpatterns), "/live/")
    socket.scope["user"] = person
    await socket.connect()
    assert await socket.receive_output(timeout=2) == {"type": "websocket.close", "code": 4401}
    await send("alarm", 7)
    assert await socket.receive_nothing(timeout=0.3)
    await socket.disconnect()


async def test_the_socket_beats_with_the_servers_clock(monkeypatch):
    monkeypatch.setattr(consumers, "BEAT_S", 0.05)
    socket = await opened(await database_sync_to_async(make_person)(Role.RESEARCHER))
    beats = [(await socket.receive_json_from(timeout=1))["now_ms"] for _ in range(3)]
    assert beats == sorted(beats)
    assert abs(beats[-1] / 1000 - time.time()) < 2
    await socket.disconnect()


async def test_ended_access_closes_an_open_socket(monkeypatch):
    monkeypatch.setattr(consumers, "BEAT_S", 0.05)
    monkeypatch.setattr(consumers, "LOOK_AGAIN_S", 0.1)
    person = await database_sync_to_async(make_person)(Role.RESEARCHER)
    socket = await opened(person)
    await database_sync_to_async(Person.objects.filter(pk=person.pk).update)(is_active=False)
    outputs = [await socket.receive_output(timeout=1)]
    while outputs[-1]["type"] != "websocket.close":
        outputs.append(await socket.receive_output(timeout=1))
    assert outputs[-1]["code"] == 4401
    await socket.disconnect()


async def test_what_a_page_says_is_ignored():
    socket = await opened(await database_sync_to_async(make_person)(Role.RESEARCHER))
    await socket.send_json_to({"acknowledge": 1})
    await socket.send_to(text_data="{no json")
    await socket.send_to(bytes_data=b"\xff")
    await send("alarm", 3)
    assert await changes(socket, 0.5) == [{"alarm": [3]}]
    await socket.disconnect()
