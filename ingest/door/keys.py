"""Who sends: stations looked up by a key's digest (or by name, where a broker has checked the key), remembered for a short
while.
"""

import threading
import time
from dataclasses import dataclass
from typing import Any, LiteralString

import psycopg

from ingest.database import connect, fetch
from ingest.door.body import KnownStation, KnownTap
from ingest.stations import digest_of
from ingest.times import now_us, us_of

REMEMBERED_S = 1.5
"""A revoked key is refused after this time at the latest."""
_MOST = 10_000
_BY_KEY: LiteralString = """
    SELECT key.expires_at, key.revoked_at, station.id, station.name, tap.id, tap.name, tap.kind, tap.unit, tap.is_float32
    FROM ingest_stationkey AS key JOIN ingest_station AS station ON station.id = key.station_id
    LEFT JOIN ingest_tap AS tap ON tap.station_id = station.id WHERE key.digest = %s"""
_BY_NAME: LiteralString = """
    SELECT key.expires_at, key.revoked_at, station.id, station.name, tap.id, tap.name, tap.kind, tap.unit, tap.is_float32
    FROM ingest_station AS station JOIN LATERAL (
        SELECT expires_at, revoked_at FROM ingest_stationkey WHERE station_id = station.id
        ORDER BY revoked_at IS NULL DESC, expires_at DESC NULLS FIRST LIMIT 1) AS key ON true
    LEFT JOIN ingest_tap AS tap ON tap.station_id = station.id WHERE station.name = %s"""


@dataclass(frozen=True, slots=True)
class KnownKey:
    """What a key opens; ``station`` is None for a key that opens nothing, ``why`` says why."""

    station: KnownStation | None
    why: str
    expires_us: int | None
    looked_up_s: float

    def reason_to_refuse(self) -> str:
        """Empty where the key is good now."""
        if self.station is not None and self.expires_us is not None and self.expires_us <= now_us():
            return "the key has expired"
        return self.why


class KeyRing:
    """Looks keys up on a connection of its own."""

    _lookup = _BY_KEY
    _none_found = "the key is not known"

    def __init__(self) -> None:
        self._kept: dict[bytes | str, KnownKey] = {}
        self._db: psycopg.Connection[Any] | None = None
        self._lock = threading.Lock()

    def remembered(self, key: str) -> KnownKey | None:
        """The key's standing if it was looked up a moment ago; never waits."""
        known = self._kept.get(self._mark(key))
        return known if known is not None and time.monotonic() - known.looked_up_s < REMEMBERED_S else None

    def look_up(self, key: str) -> KnownKey:
        """The key's standing from the database; waits.

        Raises:
            psycopg.OperationalError: The database is away.
        """
        mark = self._mark(key)
        with self._lock:
            asked_s = time.monotonic()
            try:
                rows = fetch(self._open(), self._lookup, mark)
            except psycopg.Error:
                self.close()
                rows = fetch(self._open(), self._lookup, mark)
            known = self._known(rows, asked_s)
            if len(self._kept) >= _MOST:
                self._kept.clear()
            self._kept[mark] = known
            return known

    def _mark(self, key: str) -> bytes | str:
        """What a key is looked up by."""
        return digest_of(key)

    def _known(self, rows: list[tuple[Any, ...]], asked_s: float) -> KnownKey:
        return _known_key(rows, asked_s) if rows else KnownKey(None, self._none_found, None, asked_s)

    def forget(self) -> None:
        """Look every key up again."""
        self._kept.clear()

    def close(self) -> None:
        """Close the connection; the next look-up opens a new one."""
        if self._db is not None:
            self._db.close()
            self._db = None

    def _open(self) -> psycopg.Connection[Any]:
        if self._db is None or self._db.closed:
            self._db = connect()
        return self._db


class NameRing(KeyRing):
    """Looks stations up by name: for a way in where somebody else has checked the key. One key must be in force."""

    _lookup = _BY_NAME
    _none_found = "the station is not known or has no key"

    def _mark(self, key: str) -> bytes | str:
        return key


def _known_key(rows: list[tuple[Any, ...]], asked_s: float) -> KnownKey:
    expires_at, revoked_at, station, name = rows[0][:4]
    if revoked_at is not None:
        return KnownKey(None, "the key was revoked", None, asked_s)
    taps = {row[5]: KnownTap(*row[4:9]) for row in rows if row[4] is not None}
    return KnownKey(KnownStation(station, name, taps), "", us_of(expires_at) if expires_at else None, asked_s)
