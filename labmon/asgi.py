"""Where each connection goes: readings to the station door, live sockets to Channels, all else to Django."""

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
from labmon.live.routing import websocket_urlpatterns  # noqa: E402

Scope = MutableMapping[str, Any]
Receive = Callable[[], Awaitable[MutableMapping[str, Any]]]
Send = Callable[[MutableMapping[str, Any]], Awaitable[None]]

READINGS_PATH = "/api/v1/readings"
LIVE_PATH = "/live/"


class Dispatcher:
    """Three applications behind one address; the door stands outside Django's handler and its middleware."""

    def __init__(self, door: Any, pages: Any, live: Any) -> None:
        self.door = door
        self.pages = pages
        self.live = live

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass the connection on; start and stop of the server go to the door, whose writer must drain."""
        if scope["type"] == "lifespan":
            await self.door(scope, receive, send)
        elif scope["type"] == "websocket":
            await self._live(scope, receive, send)
        elif scope["method"] == "POST" and scope["path"] == READINGS_PATH:
            await self.door(scope, receive, send)
        else:
            await self.pages(scope, receive, send)

    async def _live(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["path"] == LIVE_PATH:
            await self.live(scope, receive, send)
        else:
            await receive()
            await send({"type": "websocket.close", "code": 4404})


application = Dispatcher(door=DoorApplication(), pages=django_application,
                         live=AllowedHostsOriginValidator(AuthMiddlewareStack(URLRouter(websocket_urlpatterns))))
