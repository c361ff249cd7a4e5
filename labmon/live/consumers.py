"""The browser's socket: it says what changed, at most twice a second, and beats so that a dead link is noticed.

Messages may be lost; a page fetches the truth over HTTP on connect, on reconnect and on each change.
"""

import asyncio
import time
from contextlib import suppress
from typing import Any

from channels.db import database_sync_to_async
from channels.generic.websocket import AsyncJsonWebsocketConsumer

from labmon.live.changes import changes
from labmon.live.publish import LAB_GROUP
from labmon.people.models import Person, Role
from labmon.people.rights import has_access, role_of

LEAST_GAP_S = 0.5
BEAT_S = 4.0
LOOK_AGAIN_S = 30.0
MOST_IDS = 500
SIGN_IN_FIRST = 4401


class LabConsumer(AsyncJsonWebsocketConsumer):
    """One open page. Who is not signed in is let in only to be told so: browsers hide the code of a refused hand-shake."""

    groups = [LAB_GROUP]

    async def connect(self) -> None:
        await self.accept()
        self.waiting: dict[str, set[int]] = {}
        self.jobs: set[asyncio.Task[None]] = set()
        self.is_sending = False
        self.last_sent_s = 0.0
        self.hides_ids = True
        self.is_watching = False
        if await self.may_watch():
            self.is_watching = True
            self.start(self.beat())
        else:
            await self.close(code=SIGN_IN_FIRST)

    async def disconnect(self, code: int) -> None:
        for job in self.jobs:
            job.cancel()
        for job in list(self.jobs):
            with suppress(asyncio.CancelledError):
                await job

    async def receive(self, text_data: str | None = None, bytes_data: bytes | None = None, **_kwargs: Any) -> None:
        """A page has nothing to say here, whatever it is; it writes by HTTP."""

    async def lab_changed(self, event: dict[str, Any]) -> None:
        """Collect a change; the first goes out at once, those behind it together."""
        if not self.is_watching:
            return
        change = event["change"]
        changes.note(str(change["kind"]))
        ids = self.waiting.setdefault(str(change["kind"]), set())
        ids.update(change.get("ids", ()))
        if not self.is_sending:
            self.is_sending = True
            self.start(self.send_waiting())

    async def send_waiting(self) -> None:
        """Send what is waiting, not sooner than ``LEAST_GAP_S`` after the last message."""
        await asyncio.sleep(max(0.0, self.last_sent_s + LEAST_GAP_S - time.monotonic()))
        changed = {kind: self.shown_ids(ids) for kind, ids in self.waiting.items()}
        self.waiting = {}
        self.is_sending = False
        self.last_sent_s = time.monotonic()
        await self.send_json({"changed": changed, "now_ms": int(time.time() * 1000)})

    def shown_ids(self, ids: set[int]) -> list[int]:
        """Ids in order; none, meaning "any", for a guest or where there are too many to be worth it."""
        return [] if self.hides_ids or len(ids) > MOST_IDS else sorted(ids)

    async def beat(self) -> None:
        """A sign of life with the server's time; now and then look whether the person still may watch."""
        looked_s = time.monotonic()
        while True:
            await self.send_json({"now_ms": int(time.time() * 1000)})
            await asyncio.sleep(BEAT_S)
            if time.monotonic() - looked_s > LOOK_AGAIN_S:
                looked_s = time.monotonic()
                if not await self.may_watch():
                    await self.close(code=SIGN_IN_FIRST)
                    return

    async def may_watch(self) -> bool:
        """Whether the person behind the session still has access, asked of the database."""
        person = self.scope["user"]
        if not person.is_authenticated:
            return False
        self.hides_ids = role_of(person) is Role.GUEST
        return await self._still_has_access(person.pk)

    @database_sync_to_async
    def _still_has_access(self, person_id: int) -> bool:
        person = Person.objects.filter(pk=person_id).first()
        return person is not None and has_access(person)

    def start(self, work: Any) -> None:
        """Run beside the messages; a job that ends is forgotten."""
        job = asyncio.ensure_future(work)
        self.jobs.add(job)
        job.add_done_callback(self.jobs.discard)
