"""The API over HTTP: the key goes along, faults become exceptions, answers may be streamed."""

import http.client
import io
import json
import socket
import ssl
import time
import urllib.parse
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from typing import Any

from labmon_notebook.faults import LabAway, LabFault, fault_of
from labmon_notebook.version import AGENT

BUSY = frozenset({429, 503})
LARGEST_FAULT = 1 << 20


class Door:
    """Asks one labmon. It follows no redirects and uses no proxy: the key goes to the address that was named, or nowhere.

    Args:
        address: ``http://host:port`` or ``https://…``.
        key: A person's key.
        ca_file: Certificates to trust beside the system's, for a laboratory's own authority.
        timeout_s: Patience for each step: the connection, and each piece of an answer.
        tries: How often a busy labmon (429, 503) is asked in all.
        longest_wait_s: The longest wait between two tries, whatever Retry-After says.
    """

    def __init__(self, address: str, key: str, *, ca_file: str = "", timeout_s: float = 60.0, tries: int = 3,
                 longest_wait_s: float = 30.0, wait: Callable[[float], None] = time.sleep) -> None:
        self.parts = _checked(address)
        self.address, self.ca_file, self.timeout_s = address.rstrip("/"), ca_file, timeout_s
        self.tries, self.longest_wait_s = tries, longest_wait_s
        self._key, self._wait = key, wait

    def json(self, path: str, query: Mapping[str, Any] | None = None) -> Any:
        """The JSON that answers a GET.

        Raises:
            LabFault: One of its kinds, by what went wrong.
        """
        with self.stream(path, query) as answer:
            body = _whole(answer, self.address)
        try:
            return json.loads(body)
        except ValueError:
            raise LabAway(f"{self.address} did not answer with JSON.", "Is this labmon's address?") from None

    @contextmanager
    def stream(self, path: str, query: Mapping[str, Any] | None = None) -> Iterator[io.BufferedIOBase]:
        """The body that answers a GET, read as it comes. A body that breaks off raises LabAway while it is read."""
        for turn in range(1, self.tries + 1):
            connection = self._connection()
            try:
                answer = self._asked(connection, path, query)
                if answer.status == 200:
                    yield answer
                    return
                fault, after_s = self._fault(answer)
            finally:
                connection.close()
            if answer.status not in BUSY or turn == self.tries:
                raise fault
            self._wait(min(after_s, self.longest_wait_s))

    def _asked(self, connection: http.client.HTTPConnection, path: str,
               query: Mapping[str, Any] | None) -> http.client.HTTPResponse:
        given = {name: value for name, value in (query or {}).items() if value is not None}
        target = f"{path}?{urllib.parse.urlencode(given)}" if given else path
        headers = {"Authorization": f"Bearer {self._key}", "User-Agent": AGENT,
                   "Accept": "application/json, application/problem+json, */*"}
        try:
            connection.request("GET", target, headers=headers)
            return connection.getresponse()
        except (OSError, http.client.HTTPException) as error:
            raise away(error, self.address) from error

    def _fault(self, answer: http.client.HTTPResponse) -> tuple[LabFault, float]:
        try:
            said = json.loads(answer.read(LARGEST_FAULT))
        except (ValueError, OSError, http.client.HTTPException):
            said = None
        try:
            after_s = max(0.0, float(answer.headers.get("Retry-After") or 1.0))
        except ValueError:
            after_s = 1.0
        return fault_of(answer.status, said, self.address), after_s

    def _connection(self) -> http.client.HTTPConnection:
        host, port = self.parts.hostname or "", self.parts.port
        if self.parts.scheme == "http":
            return http.client.HTTPConnection(host, port or 80, timeout=self.timeout_s)
        context = ssl.create_default_context()
        if self.ca_file:
            context.load_verify_locations(self.ca_file)
        return http.client.HTTPSConnection(host, port or 443, timeout=self.timeout_s, context=context)


def _checked(address: str) -> urllib.parse.SplitResult:
    parts = urllib.parse.urlsplit(address)
    if parts.scheme not in {"http", "https"} or not parts.hostname or parts.path.strip("/") or parts.query:
        raise ValueError(f"address={address!r}; write the beginning of labmon's pages and nothing behind it, such as "
                         "'http://labmon.example:8000'.")
    return parts


def _whole(answer: io.BufferedIOBase, address: str) -> bytes:
    try:
        return answer.read()
    except (OSError, http.client.HTTPException) as error:
        raise away(error, address) from error


def away(error: Exception, address: str) -> LabAway:
    """Where it ended, and what to look at."""
    if isinstance(error, ssl.SSLCertVerificationError):
        return LabAway(f"The certificate of {address} is not trusted ({error.verify_message}).",
                       "Give ca_file= the certificate of your laboratory's authority, or correct this computer's clock.")
    if isinstance(error, ssl.SSLError):
        return LabAway(f"{address} does not speak TLS here ({error.reason}).", "Perhaps the address begins with http://.")
    if isinstance(error, ConnectionRefusedError):
        return LabAway(f"Nobody listens at {address}.", "Is labmon running, and is the port right?")
    if isinstance(error, TimeoutError):
        return LabAway(f"{address} does not answer in time.",
                       "Is the network up? For a long span give Lab a larger timeout_s=, or ask for less at once.")
    if isinstance(error, socket.gaierror):
        return LabAway(f"The name in {address} is not known.", "Check its spelling, or write the number of the machine.")
    if isinstance(error, http.client.IncompleteRead):
        return LabAway(f"The answer of {address} broke off.",
                       "labmon met something on the way (a damaged day file, a restart); ask again, or for shorter spans.")
    return LabAway(f"{address} gave no whole answer ({error!r}).", "Is this labmon's address, and is the network up?")
