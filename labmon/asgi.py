"""Where each connection goes: readings to the station door (a request or a stream), live sockets to Channels, else Django."""

import os
from collections.abc import Awaitable, Callable, MutableMapping
from typing import Any

from django.core.asgi import get_asgi_application

os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labmon.settings")
django_application = get_asgi_application()

from channels.auth import AuthMiddlewareStack  # noqa: E402  (needs the loaded applications)
from channels.routing import URLRouter  # noqa: E402
from channels.security.websocket import AllowedHostsOriginValidator  # noqa: E402

from ingest.door.asgi import DoorApplication  # noqa: E402
from ingest.stream import StreamApplication  # noqa: E402
from labmon.live.routing import websocket_urlpatterns  # noqa: E402

Scope = MutableMapping[str, Any]
Receive = Callable[[], Awaitable[MutableMapping[str, Any]]]
Send = Callable[[MutableMapping[str, Any]], Awaitable[None]]

READINGS_PATH = "/api/v1/readings"
STREAM_PATH = "/api/v1/readings/stream"
LIVE_PATH = "/live/"


class Dispatcher:
    """Four applications behind one address; door and stream stand outside Django's handler and its middleware."""

    def __init__(self, door: Any, stream: Any, pages: Any, live: Any) -> None:
        self.door = door
        self.stream = stream
        self.pages = pages
        self.live = live

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass the connection on; start and stop of the server go to the door, whose writer must drain."""
        if scope["type"] == "lifespan":
            await self.door(scope, receive, send)
        elif scope["type"] == "websocket":
            await self._socket(scope, receive, send)
        elif scope["method"] == "POST" and scope["path"] == READINGS_PATH:
            await self.door(scope, receive, send)
        else:
            await self.pages(scope, receive, send)

    async def _socket(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["path"] == LIVE_PATH:
            await self.live(scope, receive, send)
        elif scope["path"] == STREAM_PATH:
            await self.stream(scope, receive, send)
        else:
            await receive()
            await send({"type": "websocket.close", "code": 4404})


door = DoorApplication()
application = Dispatcher(door=door, stream=StreamApplication(door.door), pages=django_application,
                         live=AllowedHostsOriginValidator(AuthMiddlewareStack(URLRouter(websocket_urlpatterns))))
