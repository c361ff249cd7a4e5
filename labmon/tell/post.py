"""One HTTP POST to somebody else's server: no redirects, bounded time and answer, to where it was meant to go."""

import http.client
import ipaddress
import socket
import ssl
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final
from urllib.parse import SplitResult, urlsplit

from labmon.tell.faults import SendFault

TIMEOUT_S: Final = 5.0
_MOST_OF_ANSWER: Final = 500


@dataclass(frozen=True, slots=True)
class Answer:
    """What the receiver said: status, and the beginning of its text."""

    status: int
    text: str

    @property
    def is_taken(self) -> bool:
        return 200 <= self.status < 300

    def __str__(self) -> str:
        return f"answered {self.status} {self.text}".strip()


def post(url: str, body: bytes, headers: Mapping[str, str], *, is_public_only: bool) -> Answer:
    """Post and read the answer.

    Args:
        is_public_only: Refuse addresses of this machine and of private networks: the address came from a browser.
    Raises:
        SendFault: Nobody answered in time, or it is no address to post to.
    """
    parts = urlsplit(url)
    try:
        connection = _connected(parts, is_public_only)
        try:
            target = (parts.path or "/") + (f"?{parts.query}" if parts.query else "")
            connection.request("POST", target, body, {"User-Agent": "labmon", "Connection": "close"} | dict(headers))
            answer = connection.getresponse()
            text = answer.read(_MOST_OF_ANSWER).decode("utf-8", "replace").replace("\0", "")
            return Answer(answer.status, " ".join(text.split()))
        finally:
            connection.close()
    except (OSError, http.client.HTTPException, ValueError) as fault:
        raise SendFault(f"{type(fault).__name__}: {fault}") from fault


def _connected(parts: SplitResult, is_public_only: bool) -> http.client.HTTPConnection:
    """Connected to an address that was looked at, so that a name that changes its address leads nowhere else."""
    is_tls = parts.scheme == "https"
    if not is_tls and (is_public_only or parts.scheme != "http"):
        raise SendFault(f"{parts.scheme}: is no address to post to; https is.", is_final=True)
    host, port = parts.hostname or "", parts.port or (443 if is_tls else 80)
    address = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)[0][4]
    if is_public_only and not ipaddress.ip_address(address[0]).is_global:
        raise SendFault(f"{host} is {address[0]}, not an address on the internet.", is_final=True)
    near = socket.create_connection(address[:2], timeout=TIMEOUT_S)
    connection = http.client.HTTPConnection(host, port, timeout=TIMEOUT_S)
    try:
        connection.sock = ssl.create_default_context().wrap_socket(near, server_hostname=host) if is_tls else near
    except OSError:
        near.close()
        raise
    return connection
