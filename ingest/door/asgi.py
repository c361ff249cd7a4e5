"""The station door over HTTP: a bare ASGI application, mounted beside Django's at POST /api/v1/readings."""

import asyncio
import gc
import logging
from collections.abc import Awaitable, Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import msgspec
import psycopg

from ingest.door.answers import answer_json
from ingest.door.body import KnownStation
from ingest.door.client import client_health
from ingest.door.committer import Committer, RefusedMessage, RefusedNumbers, Result, Waiting
from ingest.door.decode import LARGEST_BODY, Form, decode, form_of, is_gzipped
from ingest.door.keys import KeyRing
from ingest.door.notices import note_refused, note_repeats, note_told, note_used
from ingest.door.payload import UnknownTap, check_body, lowest_sequences
from ingest.door.refusal import Refusal, come_again, no_entry, too_large
from ingest.times import now_us

log = logging.getLogger(__name__)

Receive = Callable[[], Awaitable[dict[str, Any]]]
Send = Callable[[dict[str, Any]], Awaitable[None]]
PATIENCE_S = 12.0
"""A request is answered after this time at the latest."""
_LARGE = 256 << 10
"""Bodies beyond this are decoded in a thread, so that small ones need not wait."""


class Door:
    """Takes bodies of stations in, whatever way they come, and answers after the commit.

    Args:
        keys: What tells who sends; the "key" of the other methods is what this ring knows stations by.
        has_presence: Whether its being up is written down, so that silence is judged.
    """

    def __init__(self, keys: KeyRing | None = None, *, has_presence: bool = True) -> None:
        self.keys = keys or KeyRing()
        self._has_presence = has_presence
        self._loop: asyncio.AbstractEventLoop | None = None
        self._committer: Committer | None = None
        self._lookups = ThreadPoolExecutor(1, thread_name_prefix="door-keys")
        self._decoders = ThreadPoolExecutor(1, thread_name_prefix="door-decode")

    def start(self) -> None:
        """Start the committer for the running loop; done by itself with the first body."""
        loop = asyncio.get_running_loop()
        if self._loop is not loop:
            if self._committer is not None:
                self._committer.close(0.0)
            self._loop, self._committer = loop, Committer(self._tell, has_presence=self._has_presence)
            self._committer.start()

    async def close(self) -> None:
        """Commit what waits and stop."""
        if self._committer is not None:
            await asyncio.to_thread(self._committer.close)
            await asyncio.sleep(0)  # lets the last answers out
        self._loop = self._committer = None
        await asyncio.to_thread(self.keys.close)

    async def station_of(self, key: str, *, is_fresh: bool = False) -> KnownStation:
        """The station that a key opens.

        Raises:
            Refusal: 401, or 503 where the database is away.
        """
        known = None if is_fresh else self.keys.remembered(key)
        if known is None:
            try:
                known = await asyncio.wait_for(
                    asyncio.get_running_loop().run_in_executor(self._lookups, self.keys.look_up, key), PATIENCE_S)
            except (psycopg.OperationalError, TimeoutError) as error:
                raise come_again(503, "the database is away", 5) from error
        if (why := known.reason_to_refuse()) or known.station is None:
            raise no_entry(why, "Use the station's current key; a manager or owner makes a new one on the station's page.")
        return known.station

    async def take(self, body: bytes, form: Form | None, key: str, remote_address: str = "") -> dict[str, Any]:
        """Decode, check, commit, answer; ``form`` None: by the first bytes.

        Raises:
            Refusal: The body is not taken.
        """
        self.start()
        arrival_us = now_us()
        station = await self.station_of(key)
        if len(body) > _LARGE or is_gzipped(body, form):
            found = await asyncio.get_running_loop().run_in_executor(self._decoders, decode, body, form)
        else:
            found = decode(body, form)
        try:
            try:
                checked = check_body(found, station, arrival_us, remote_address)
            except UnknownTap:
                station = await self.station_of(key, is_fresh=True)
                checked = check_body(found, station, arrival_us, remote_address)
        except Refusal:
            await self._keep_refused(found, station)
            raise
        result = await self._commit(checked)
        if isinstance(result, Refusal):
            raise result
        note_repeats(station.id, result.known, result.disordered)
        if health := client_health(found):
            note_told(station.id, health)
        return answer_json(result, now_us())

    async def keep_message(self, message: bytes, key: str, refusal: Refusal) -> None:
        """Set a refused message aside as it came: for a way in that forgets what it handed over.

        Raises:
            Refusal: 401, 429 or 503.
        """
        self.start()
        station = await self.station_of(key)
        result = await self._commit(RefusedMessage(station.id, message, refusal))
        if isinstance(result, Refusal):
            raise result

    async def _keep_refused(self, found: dict[str, Any], station: KnownStation) -> None:
        """``through`` must not reach beyond what was refused."""
        boot, lowest = lowest_sequences(found, station)
        if lowest:
            await self._commit(RefusedNumbers(station.id, boot, lowest))

    async def _commit(self, item: Any) -> Result:
        assert self._committer is not None and self._loop is not None
        future: asyncio.Future[Result] = self._loop.create_future()
        self._committer.submit(item, future)
        try:
            return await asyncio.wait_for(asyncio.shield(future), PATIENCE_S)
        except TimeoutError:
            return come_again(503, "the database does not answer in time", 5)

    def _tell(self, results: Sequence[tuple[Waiting, Result]]) -> None:
        """From the committer's thread: hand the results to the loop."""
        loop = self._loop
        if loop is not None and not loop.is_closed():
            loop.call_soon_threadsafe(_resolve, results)


def _resolve(results: Sequence[tuple[Waiting, Result]]) -> None:
    for waiting, result in results:
        if not waiting.token.done():
            waiting.token.set_result(result)


class DoorApplication:
    """ASGI application for stations: HTTP POST, and lifespan where it stands alone."""

    def __init__(self) -> None:
        self.door = Door()

    async def __call__(self, scope: dict[str, Any], receive: Receive, send: Send) -> None:
        if scope["type"] == "lifespan":
            await self._lifespan(receive, send)
        elif scope["type"] == "http":
            await self._http(scope, receive, send)
        else:
            raise RuntimeError(f"the station door does not speak {scope['type']}")

    async def start(self) -> None:
        """Begin to write down that the door is up; with the server's start-up."""
        self.door.start()

    async def close(self) -> None:
        """Commit what waits; with the server's shutdown."""
        await self.door.close()

    async def _lifespan(self, receive: Receive, send: Send) -> None:
        while True:
            message = await receive()
            if message["type"] == "lifespan.startup":
                gc.collect()
                gc.freeze()  # what is loaded by now stays: looking through it again and again cost a third of a commit
                await self.start()
                await send({"type": "lifespan.startup.complete"})
            elif message["type"] == "lifespan.shutdown":
                await self.close()
                await send({"type": "lifespan.shutdown.complete"})
                return

    async def _http(self, scope: dict[str, Any], receive: Receive, send: Send) -> None:
        try:
            answer = await self._answer(scope, receive)
        except Refusal as refusal:
            note_refused(sent_key(scope), remote_address(scope), refusal)
            await _send_json(send, refusal.status, refusal.as_json(), "application/problem+json", refusal.headers)
        except _Gone:
            return
        else:
            await _send_json(send, 200, answer, "application/json", {})

    async def _answer(self, scope: dict[str, Any], receive: Receive) -> dict[str, Any]:
        if scope["method"] != "POST":
            raise Refusal(405, "the station door takes POST only", "Send readings with POST.", headers={"allow": "POST"})
        headers = dict(scope["headers"])
        key = bearer_of(headers.get(b"authorization"))
        await self.door.station_of(key)
        note_used(key, remote_address(scope))
        form = form_of(_header(headers, b"content-type"), _header(headers, b"content-encoding"))
        body = await _body(headers, receive)
        return await self.door.take(body, form, key, remote_address(scope))


def remote_address(scope: dict[str, Any]) -> str:
    """Who speaks; empty where the server does not know."""
    return scope["client"][0] if scope.get("client") else ""


def sent_key(scope: dict[str, Any]) -> str:
    """The key as it came, empty where there is none."""
    return _key_in(dict(scope["headers"]).get(b"authorization"))


def _header(headers: dict[bytes, bytes], name: bytes) -> str:
    return headers.get(name, b"").decode("latin-1")


class _Gone(Exception):
    """The station hung up before it had sent all."""


def bearer_of(header: bytes | None) -> str:
    """The key of an Authorization header.

    Raises:
        Refusal: 401, there is none.
    """
    key = _key_in(header)
    if not key:
        raise no_entry("a station key is needed", "Send the header Authorization: Bearer <station key>.", error="")
    return key


def _key_in(header: bytes | None) -> str:
    scheme, _, key = (header or b"").decode("latin-1").strip().partition(" ")
    return key.strip() if scheme.lower() == "bearer" else ""


async def _body(headers: dict[bytes, bytes], receive: Receive) -> bytes:
    """The whole body, never more than is allowed."""
    refusal = too_large(f"the body has more than {LARGEST_BODY >> 20} MiB", "Send half as many readings at a time.")
    length = headers.get(b"content-length", b"0")
    if length.isdigit() and int(length[:20]) > LARGEST_BODY:
        raise refusal
    parts: list[bytes] = []
    size = 0
    while True:
        message = await receive()
        if message["type"] == "http.disconnect":
            raise _Gone
        parts.append(message.get("body", b""))
        size += len(parts[-1])
        if size > LARGEST_BODY:
            raise refusal
        if not message.get("more_body"):
            return parts[0] if len(parts) == 1 else b"".join(parts)


async def _send_json(send: Send, status: int, content: object, kind: str, headers: dict[str, str]) -> None:
    body = msgspec.json.encode(content)
    lines = [(b"content-type", kind.encode()), (b"content-length", str(len(body)).encode()), (b"cache-control", b"no-store"),
             *((name.encode(), value.encode("latin-1", "replace")) for name, value in headers.items())]
    await send({"type": "http.response.start", "status": status, "headers": lines})
    await send({"type": "http.response.body", "body": body})
