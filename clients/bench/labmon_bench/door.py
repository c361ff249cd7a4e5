"""The station door over HTTP, as a kept connection."""

from __future__ import annotations

import http.client
import json
import socket
import ssl
import urllib.parse
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

PATH = "/api/v1/readings"


class DoorAway(Exception):
    """No whole answer came; words say where it ended and what to look at."""


@dataclass(frozen=True)
class DoorAnswer:
    """A whole answer.

    Attributes:
        said: The JSON in it; None where it has none.
        date: The server's Date header.
        retry_after_s: What Retry-After says; 0 where it says nothing.
    """

    status: int
    said: Any
    date: str
    retry_after_s: float

    @property
    def words(self) -> str:
        """Title, detail and field of a problem document, or the status alone."""
        if not isinstance(self.said, dict) or "title" not in self.said:
            return f"status {self.status}"
        field = f" (field {self.said['field']})" if self.said.get("field") else ""
        return f"{self.said['title']}{field}: {self.said.get('detail', '')}".rstrip(": ")

    @property
    def field(self) -> str:
        """The field that a problem document names."""
        return str(self.said.get("field") or "") if isinstance(self.said, dict) else ""


class Door:
    """A kept connection.

    Args:
        address: ``http://host:port`` or ``https://…``.
        ca_file: Certificates to trust beside the system's, for a laboratory's own authority.
        timeout_s: Patience for each step.
    """

    def __init__(self, address: str, ca_file: str = "", timeout_s: float = 20.0) -> None:
        self.parts = urllib.parse.urlsplit(address)
        self.address, self.ca_file, self.timeout_s = address, ca_file, timeout_s
        self._connection: http.client.HTTPConnection | None = None

    def post(self, content: bytes, headers: Mapping[str, str], key: str) -> DoorAnswer:
        """Send one body.

        Raises:
            DoorAway: No whole answer came.
        """
        return self._ask("POST", content, {**headers, "Authorization": f"Bearer {key}"})

    def knock(self) -> DoorAnswer:
        """See whether a station door is there: it answers 405 to anything but POST.

        Raises:
            DoorAway: No whole answer came.
        """
        return self._ask("GET", None, {})

    def close(self) -> None:
        """Close the connection; the next call opens a new one."""
        if self._connection is not None:
            self._connection.close()
            self._connection = None

    def _ask(self, method: str, content: bytes | None, headers: Mapping[str, str]) -> DoorAnswer:
        is_fresh = self._connection is None
        try:
            if self._connection is None:
                self._connection = self._new_connection()
            self._connection.request(method, PATH, content, dict(headers))
            answer = self._connection.getresponse()
            body = answer.read()
        except (OSError, http.client.HTTPException) as error:
            self.close()
            if not is_fresh and isinstance(error, (http.client.RemoteDisconnected, ConnectionError)):
                return self._ask(method, content, headers)  # the server closed an idle connection; sending twice is harmless
            raise DoorAway(_away_words(error, self.address)) from error
        return DoorAnswer(answer.status, _json_of(body), answer.headers.get("Date", ""),
                          _seconds(answer.headers.get("Retry-After")))

    def _new_connection(self) -> http.client.HTTPConnection:
        assert self.parts.hostname is not None
        if self.parts.scheme == "http":
            return http.client.HTTPConnection(self.parts.hostname, self.parts.port or 80, timeout=self.timeout_s)
        context = ssl.create_default_context()
        if self.ca_file:
            context.load_verify_locations(self.ca_file)
        return http.client.HTTPSConnection(self.parts.hostname, self.parts.port or 443, timeout=self.timeout_s, context=context)


def _json_of(body: bytes) -> Any:
    try:
        return json.loads(body)
    except ValueError:
        return None


def _seconds(text: str | None) -> float:
    try:
        return max(0.0, float(text or 0))
    except ValueError:
        return 0.0


def _away_words(error: Exception, address: str) -> str:
    """Where it ended, and what to look at."""
    if isinstance(error, ssl.SSLCertVerificationError):
        return (f"the certificate of {address} is not trusted ({error.verify_message}); set ca_file to the certificate of your "
                "laboratory's authority, or correct the PC's clock")
    if isinstance(error, ssl.SSLError):
        return f"{address} does not speak TLS here ({error.reason}); perhaps the address begins with http://"
    if isinstance(error, ConnectionRefusedError):
        return f"nobody listens at {address}; is labmon running, and is the port right?"
    if isinstance(error, (TimeoutError, socket.timeout)):
        return f"{address} does not answer in time; is the network up, and does a firewall stand between?"
    if isinstance(error, socket.gaierror):
        return f"the name in {address} is not known; check its spelling, or write the number of the machine"
    if isinstance(error, FileNotFoundError):
        return "the ca_file of the settings is not there; correct its path"
    return f"{address} gave no whole answer ({error!r}); is this labmon's address, and is the network up?"
