"""The station door over WebSocket (RFC 6455): a batch a message, an answer a batch, in order; for benches at 10 Hz to 1 kHz.

Answers are those of the HTTP door: after the commit, with what became of the readings, or a problem document (it alone has
``status``). What is unanswered on one connection is bounded: beyond that nothing more is read, so that the network holds
the sender back.
"""

import asyncio
import logging
from collections import deque
from collections.abc import Awaitable, Callable
from typing import Any

import msgspec

from ingest.door.asgi import Door, bearer_of, remote_address, sent_key
from ingest.door.decode import Form
from ingest.door.notices import note_refused, note_used
from ingest.door.refusal import Refusal

log = logging.getLogger(__name__)

Receive = Callable[[], Awaitable[dict[str, Any]]]
Send = Callable[[dict[str, Any]], Awaitable[None]]
MOST_UNANSWERED = 32
"""Batches of one connection that may be unanswered."""
MOST_UNANSWERED_BYTES = 16 << 20
"""The same in bytes; one message more is let in."""
LOOK_AGAIN_S = 2.0
"""An open connection whose key was revoked is closed after this time and that of the key ring at the latest."""
NO_ENTRY, FAULT = 4401, 1011
_LONGEST_REASON = 123
_JSON = Form()


class StreamApplication:
    """ASGI application for WebSocket connections of stations."""

    def __init__(self, door: Door) -> None:
        self.door = door

    async def __call__(self, scope: dict[str, Any], receive: Receive, send: Send) -> None:
        """Let in who has a station's key in the Authorization header; refuse the handshake else."""
        await receive()
        try:
            key = bearer_of(dict(scope["headers"]).get(b"authorization"))
            await self.door.station_of(key)
        except Refusal as refusal:
            note_refused(sent_key(scope), remote_address(scope), refusal)
            await _turn_away(scope, send, refusal)
            return
        note_used(key, remote_address(scope))
        await send({"type": "websocket.accept"})
        await Stream(self.door, key, remote_address(scope), receive, send).run()


class Stream:
    """One open connection: reads, has each batch committed, answers in the order read, and looks after the key."""

    def __init__(self, door: Door, key: str, remote_address: str, receive: Receive, send: Send) -> None:
        self.door, self.key, self.remote_address, self.receive, self.send = door, key, remote_address, receive, send
        self._unanswered: deque[tuple[asyncio.Task[dict[str, Any]], int]] = deque()
        self._bytes = 0
        self._came, self._answered = asyncio.Event(), asyncio.Event()

    async def run(self) -> None:
        """Until the station hangs up or its key ends; what was read is committed in any case."""
        parts = [asyncio.create_task(part()) for part in (self._read, self._answer, self._watch)]
        done, _ = await asyncio.wait(parts, return_when=asyncio.FIRST_COMPLETED)
        for part in parts:
            part.cancel()
        await asyncio.gather(*parts, return_exceptions=True)
        fault = next((part.exception() for part in done if part.exception() is not None), None)
        if fault is not None and parts[0] not in done:
            await self._close(fault)
        await asyncio.gather(*(batch for batch, _ in self._unanswered), return_exceptions=True)

    async def _read(self) -> None:
        while True:
            while len(self._unanswered) >= MOST_UNANSWERED or self._bytes > MOST_UNANSWERED_BYTES:
                self._answered.clear()
                await self._answered.wait()
            message = await self.receive()
            if message["type"] == "websocket.disconnect":
                return
            text = message.get("text")
            body, form = (message["bytes"], None) if text is None else (text.encode(), _JSON)
            batch = asyncio.create_task(self.door.take(body, form, self.key, self.remote_address))
            self._unanswered.append((batch, len(body)))
            self._bytes += len(body)
            self._came.set()

    async def _answer(self) -> None:
        """Raises the refusal that ends the connection."""
        while True:
            while not self._unanswered:
                self._came.clear()
                await self._came.wait()
            batch, size = self._unanswered[0]
            end: Refusal | None = None
            try:
                answer: dict[str, Any] = await asyncio.shield(batch)
            except Refusal as refusal:
                answer, end = refusal.as_json(), refusal if refusal.status == 401 else None
            try:
                await self.send({"type": "websocket.send", "text": msgspec.json.encode(answer).decode()})
            except (OSError, RuntimeError):  # the station is gone: it will repeat what it has no answer to
                return
            self._unanswered.popleft()
            self._bytes -= size
            self._answered.set()
            if end is not None:
                raise end

    async def _watch(self) -> None:
        """Raises the refusal when the key is no longer good."""
        while True:
            await asyncio.sleep(LOOK_AGAIN_S)
            try:
                await self.door.station_of(self.key)
            except Refusal as refusal:
                if refusal.status == 401:
                    raise

    async def _close(self, fault: BaseException) -> None:
        if isinstance(fault, Refusal):
            code, reason = NO_ENTRY, fault.title
        else:
            log.error("stream_failed", exc_info=fault)
            code, reason = FAULT, "labmon failed; connect again and repeat what was not answered"
        await self.send({"type": "websocket.close", "code": code, "reason": reason[:_LONGEST_REASON]})


async def _turn_away(scope: dict[str, Any], send: Send, refusal: Refusal) -> None:
    """Answer the handshake with the refusal where the server can, else close it."""
    if "websocket.http.response" not in (scope.get("extensions") or {}):
        await send({"type": "websocket.close", "code": NO_ENTRY, "reason": refusal.title[:_LONGEST_REASON]})
        return
    body = msgspec.json.encode(refusal.as_json())
    headers = [(b"content-type", b"application/problem+json"), (b"content-length", str(len(body)).encode()),
               *((name.encode(), value.encode("latin-1", "replace")) for name, value in refusal.headers.items())]
    await send({"type": "websocket.http.response.start", "status": refusal.status, "headers": headers})
    await send({"type": "websocket.http.response.body", "body": body})
