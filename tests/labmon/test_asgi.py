"""Each connection goes to its application."""

import pytest

from labmon.asgi import Dispatcher, application


class Taker:
    """Remembers what it was given."""

    def __init__(self):
        self.taken = []

    async def __call__(self, scope, receive, send):
        self.taken.append(scope.get("path", scope["type"]))


@pytest.fixture
def dispatcher():
    return Dispatcher(door=Taker(), stream=Taker(), pages=Taker(), live=Taker())


@pytest.mark.parametrize(("scope", "to"), [
    ({"type": "http", "method": "POST", "path": "/api/v1/readings"}, "door"),
    ({"type": "http", "method": "GET", "path": "/api/v1/readings"}, "pages"),
    ({"type": "http", "method": "POST", "path": "/api/v1/readings/"}, "pages"),
    ({"type": "http", "method": "POST", "path": "/api/v1/experiments"}, "pages"),
    ({"type": "websocket", "path": "/live/"}, "live"),
    ({"type": "websocket", "path": "/api/v1/readings/stream"}, "stream"),
    ({"type": "http", "method": "GET", "path": "/api/v1/readings/stream"}, "pages"),
    ({"type": "lifespan"}, "door"),
])
async def test_connection_goes_to(dispatcher, scope, to):
    await dispatcher(scope, None, None)
    assert {name: len(taker.taken) for name, taker in vars(dispatcher).items()} == {
        name: int(name == to) for name in ("door", "stream", "pages", "live")}


async def test_socket_of_unknown_path_is_closed(dispatcher):
    sent = []

    async def receive():
        return {"type": "websocket.connect"}

    async def send(message):
        sent.append(message)

    await dispatcher({"type": "websocket", "path": "/elsewhere/"}, receive, send)
    assert sent == [{"type": "websocket.close", "code": 4404}]
    assert dispatcher.live.taken == []


def test_request_and_stream_share_one_door():
    assert type(application.door).__name__ == "DoorApplication" and application.stream.door is application.door.door
