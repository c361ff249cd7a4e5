"""Row ids of a station's boots and of the taps within them; made where they are missing."""

from collections.abc import Iterable
from typing import Any

import numpy as np
import psycopg

from ingest.database import fetch

StationBootKey = tuple[int, str]
"""(station id, boot id as sent, "" where none)."""
TapBootKey = tuple[int, int]
"""(tap id, StationBoot id)."""


def station_boot_ids(db: psycopg.Connection[Any], keys: Iterable[StationBootKey],
                     arrival_us: int) -> dict[StationBootKey, int]:
    """StationBoot ids; made in sorted order, so that two writers cannot wait for each other."""
    wanted = sorted(set(keys))
    stations, boots = [station for station, _ in wanted], [boot for _, boot in wanted]
    psycopg.Cursor(db).execute(
        "INSERT INTO ingest_stationboot (station_id, boot, firmware, first_arrival_us, last_arrival_us, "
        "is_server_timed, clock_fault, remote_address) "
        "SELECT station, boot, '', %s, %s, FALSE, '', '' FROM unnest(%s::bigint[], %s::text[]) AS row(station, boot) "
        "ORDER BY station, boot ON CONFLICT (station_id, boot) DO NOTHING", (arrival_us, arrival_us, stations, boots))
    return {(station, boot): row for station, boot, row in fetch(
        db, "SELECT station_id, row.boot, id FROM unnest(%s::bigint[], %s::text[]) AS row(station, boot) "
            "JOIN ingest_stationboot AS kept ON station_id = station AND kept.boot = row.boot", stations, boots)}


def tap_boot_ids(db: psycopg.Connection[Any], keys: Iterable[TapBootKey]) -> dict[TapBootKey, int]:
    """TapBoot ids; made in sorted order."""
    wanted = sorted(set(keys))
    taps, boots = [tap for tap, _ in wanted], [boot for _, boot in wanted]
    psycopg.Cursor(db).execute(
        "INSERT INTO ingest_tapboot (tap_id, station_boot_id, first_at_us, last_at_us) "
        "SELECT tap, boot, 9223372036854775807, -9223372036854775808 FROM unnest(%s::bigint[], %s::bigint[]) "
        "AS row(tap, boot) ORDER BY tap, boot ON CONFLICT (tap_id, station_boot_id) DO NOTHING", (taps, boots))
    return {(tap, boot): row for tap, boot, row in fetch(
        db, "SELECT tap_id, station_boot_id, id FROM unnest(%s::bigint[], %s::bigint[]) AS row(tap, boot) "
            "JOIN ingest_tapboot ON tap_id = tap AND station_boot_id = boot", taps, boots)}


def ranges_of(sequences: Any) -> list[tuple[int, int]]:
    """Closed ranges (first, last) that cover exactly these numbers, sorted."""
    numbers = np.unique(sequences)
    if not len(numbers):
        return []
    edges = np.flatnonzero(np.diff(numbers) != 1)
    firsts = numbers[np.concatenate([[0], edges + 1])]
    lasts = numbers[np.concatenate([edges, [len(numbers) - 1]])]
    return list(zip(firsts.tolist(), lasts.tolist(), strict=True))


def multirange_text(ranges: Iterable[tuple[int, int]]) -> str:
    """PostgreSQL's text of an int8multirange of closed ranges."""
    return "{" + ",".join(f"[{first},{last}]" for first, last in ranges) + "}"
