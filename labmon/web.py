"""Runs the web process: ``python -m labmon.web --listen 127.0.0.1 --port 8000``."""

import argparse
import os
import socket

import django
import uvicorn
from django.conf import settings

BACKLOG = 2048
DRAIN_WITHIN_S = 5


def bound_socket(listen: str, port: int) -> socket.socket:
    """A socket bound to the address, not yet listening.

    Raises:
        OSError: The address is taken or not ours.
    """
    family = socket.AF_INET6 if ":" in listen else socket.AF_INET
    bound = socket.socket(family, socket.SOCK_STREAM)
    try:
        bound.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        bound.bind((listen, port))
    except OSError:
        bound.close()
        raise
    return bound


def serve(listener: socket.socket) -> None:
    """Serve until SIGTERM or SIGINT; then finish open requests and drain the door.

    Deflate per message costs memory for each browser and the messages are tiny, so it is off.
    """
    config = uvicorn.Config("labmon.asgi:application", ws_per_message_deflate=False, lifespan="on", access_log=False,
                            log_config=None, timeout_graceful_shutdown=DRAIN_WITHIN_S, backlog=BACKLOG,
                            proxy_headers=True, forwarded_allow_ips=settings.TRUSTED_PROXIES, server_header=False)
    _listen_to_notices()
    uvicorn.Server(config).run(sockets=[listener])


def _listen_to_notices() -> None:
    """What the door notices of keys goes to where the pages read it."""
    django.setup()
    from ingest.door.notices import listen  # needs the loaded applications
    from labmon.benches.door_log import keep_notices_in_thread

    listen(keep_notices_in_thread)


def main() -> None:
    """Take the address, or the socket that the supervisor holds open across restarts."""
    os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labmon.settings")
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--listen", default=settings.LISTEN, help="address to listen on")
    parser.add_argument("--port", type=int, default=settings.PORT)
    parser.add_argument("--socket", type=int, help="number of an open, bound socket, instead of the address")
    wish = parser.parse_args()
    serve(socket.socket(fileno=wish.socket) if wish.socket is not None else bound_socket(wish.listen, wish.port))


if __name__ == "__main__":
    main()
