"""A station's way through the lab's HTTP door: one kept-alive connection, plain standard library."""

import http.client
import json
from dataclasses import dataclass, field
from typing import Any
from urllib.parse import urlsplit

PATH = "/api/v1/readings"
TIMEOUT_S = 10.0


class NoAnswer(Exception):
    """The door could not be reached, or the answer was cut off: it is not known whether the batch was stored."""


@dataclass(frozen=True, slots=True)
class Answer:
    """What the door said."""

    status: int
    body: dict[str, Any]
    retry_after_s: float


@dataclass(slots=True)
class Door:
    """The door of a lab at ``address``, for one station key."""

    address: str
    key: str = field(repr=False)
    connection: http.client.HTTPConnection | None = None

    def send(self, batch: dict[str, Any]) -> Answer:
        """POST one batch; a kept connection that the lab has closed meanwhile is opened anew, once.

        Raises:
            NoAnswer: Nothing (whole) came back; the same batch may be sent again.
        """
        body = json.dumps(batch, allow_nan=False, separators=(",", ":")).encode()
        was_open = self.connection is not None
        try:
            try:
                return self._post(body)
            except (ConnectionError, http.client.RemoteDisconnected):
                if not was_open:
                    raise
                self.close()
                return self._post(body)
        except (OSError, http.client.HTTPException) as fault:
            self.close()
            raise NoAnswer(f"{type(fault).__name__}: {fault}") from fault

    def _post(self, body: bytes) -> Answer:
        connection = self._connected()
        connection.request("POST", PATH, body, {"Authorization": f"Bearer {self.key}", "Content-Type": "application/json"})
        response = connection.getresponse()
        text = response.read()
        return Answer(response.status, _as_object(text), _seconds(response.headers.get("Retry-After")))

    def close(self) -> None:
        """Drop the connection; the next batch opens a new one."""
        if self.connection is not None:
            self.connection.close()
            self.connection = None

    def _connected(self) -> http.client.HTTPConnection:
        if self.connection is None:
            parts = urlsplit(self.address)
            kind = http.client.HTTPSConnection if parts.scheme == "https" else http.client.HTTPConnection
            self.connection = kind(parts.hostname or "127.0.0.1", parts.port, timeout=TIMEOUT_S)
        return self.connection


def _as_object(text: bytes) -> dict[str, Any]:
    try:
        found = json.loads(text)
    except ValueError:
        return {}
    return found if isinstance(found, dict) else {}


def _seconds(header: str | None) -> float:
    try:
        return max(float(header or 0.0), 0.0)
    except ValueError:
        return 0.0
