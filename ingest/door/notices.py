"""What the door saw, for whoever looks after stations: keys used and refused, readings that came again, how clients do.

Kept in memory, bounded, and handed on by a thread of its own at most every ``PAUSE_S``: a request never waits for it. Lost
with the process; the readings are the record, these are hints for a person at a bench.
"""

import logging
import threading
from collections.abc import Callable
from dataclasses import dataclass, field, replace

from ingest.door.client import ClientHealth
from ingest.door.refusal import Refusal
from ingest.stations import digest_of
from ingest.times import SECOND_US, now_us

log = logging.getLogger(__name__)

PAUSE_S = 2.0
USED_AGAIN_AFTER_US = 30 * SECOND_US
"""A key in steady use is told of this often."""
MOST = 200
"""Different refusals, and different keys, that are kept between two hand-overs; what is more is only counted."""
TELLING = frozenset({400, 401, 403, 413})
"""Refusals that a person can mend; being told to come again is none."""
_SHORTEST_KEY = 16
"""What is shorter than any key of ours is no key but perhaps somebody's password: not even its first letters are kept."""


@dataclass(frozen=True, slots=True)
class KeyUsed:
    """A key that let a station in."""

    digest: bytes
    at_us: int
    remote_address: str


@dataclass(frozen=True, slots=True, kw_only=True)
class KeyRefused:
    """A request that was refused, as often as it came; ``digest`` tells whose key it was, if anybody's."""

    digest: bytes
    hint: str
    remote_address: str
    status: int
    title: str
    detail: str
    field: str
    first_us: int
    last_us: int
    count: int = 1


@dataclass(frozen=True, slots=True)
class Repeats:
    """Readings of a station that came again, and that came behind later ones."""

    known: int = 0
    disordered: int = 0


@dataclass(frozen=True, slots=True)
class ClientTold:
    """What a bench's program told of itself, and when."""

    health: ClientHealth
    at_us: int


@dataclass(slots=True)
class Notices:
    """What has come together since the last hand-over; ``repeats`` and ``told`` by station id."""

    used: dict[bytes, KeyUsed] = field(default_factory=dict)
    refused: dict[tuple[bytes, str, str, str], KeyRefused] = field(default_factory=dict)
    repeats: dict[int, Repeats] = field(default_factory=dict)
    told: dict[int, ClientTold] = field(default_factory=dict)
    left_out: int = 0


Listener = Callable[[Notices], object]
_listeners: list[Listener] = []
_lock = threading.Lock()
_told: dict[bytes, int] = {}
_waiting = Notices()
_said = threading.Event()
_thread: threading.Thread | None = None


def listen(callback: Listener) -> None:
    """Call ``callback`` with what was noticed, in a thread of its own."""
    if callback not in _listeners:
        _listeners.append(callback)


def stop_listening(callback: Listener) -> None:
    """Undo ``listen``, and forget what nobody has heard."""
    if callback in _listeners:
        _listeners.remove(callback)
    with _lock:
        _told.clear()
    drain()


def note_used(key: str, remote_address: str) -> None:
    """A station was let in with this key; returns at once."""
    if not _listeners:
        return
    digest, moment_us = digest_of(key), now_us()
    if moment_us - _told.get(digest, 0) < USED_AGAIN_AFTER_US:
        return
    with _lock:
        if len(_told) > 10 * MOST:
            _told.clear()
        if len(_waiting.used) < MOST:
            _told[digest] = moment_us
            _waiting.used[digest] = KeyUsed(digest, moment_us, remote_address[:64])
    _tell_soon()


def note_refused(key: str, remote_address: str, refusal: Refusal) -> None:
    """A request was refused; returns at once. ``key`` is empty where none was sent."""
    if not _listeners or refusal.status not in TELLING:
        return
    digest, moment_us, address = digest_of(key), now_us(), remote_address[:64]
    mark = digest, address, refusal.title, refusal.at
    with _lock:
        known = _waiting.refused.get(mark)
        if known is not None:
            _waiting.refused[mark] = replace(known, last_us=moment_us, count=known.count + 1)
        elif len(_waiting.refused) < MOST:
            _waiting.refused[mark] = KeyRefused(
                digest=digest, hint=key[:4] if len(key) >= _SHORTEST_KEY and key.isascii() else "", remote_address=address,
                status=refusal.status, title=refusal.title[:200], detail=refusal.detail[:300], field=refusal.at[:200],
                first_us=moment_us, last_us=moment_us)
        else:
            _waiting.left_out += 1
    _tell_soon()


def note_repeats(station_id: int, known: int, disordered: int) -> None:
    """Readings came again, or out of order; returns at once."""
    if not _listeners or not (known or disordered):
        return
    with _lock:
        before = _waiting.repeats.get(station_id, Repeats())
        if station_id in _waiting.repeats or len(_waiting.repeats) < MOST:
            _waiting.repeats[station_id] = Repeats(before.known + known, before.disordered + disordered)
    _tell_soon()


def note_told(station_id: int, health: ClientHealth) -> None:
    """A bench's program told of itself; returns at once."""
    if not _listeners:
        return
    with _lock:
        if station_id in _waiting.told or len(_waiting.told) < MOST:
            _waiting.told[station_id] = ClientTold(health, now_us())
    _tell_soon()


def drain() -> Notices:
    """What has come together; it is forgotten here."""
    global _waiting
    with _lock:
        found, _waiting = _waiting, Notices()
    return found


def _tell_soon() -> None:
    global _thread
    _said.set()
    if _thread is None or not _thread.is_alive():
        with _lock:
            if _thread is None or not _thread.is_alive():
                _thread = threading.Thread(target=_tell, name="door-notices", daemon=True)
                _thread.start()


def _tell() -> None:
    pause = threading.Event()
    while _said.wait():
        _said.clear()
        found = drain()
        for callback in list(_listeners):
            try:
                callback(found)
            except Exception:  # a hint that fails must not end the hints; the readings are the record
                log.warning("door_notices_failed", exc_info=True)
        pause.wait(PAUSE_S)
