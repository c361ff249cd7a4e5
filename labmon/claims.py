"""Claiming taps: one tap is never judged (or rolled up) by two workers at once, and nobody waits for another.

Advisory locks of the transaction: they end with it, whatever becomes of the worker.
"""

from collections.abc import Iterable

from django.db import connection

#: First key of the two-key locks; the second is the tap's id (folded into 32 bits).
JUDGING, ROLLING, BEAT, STATISTICS = 0x6C61, 0x6C62, 0x6C63, 0x6C64


def claim_taps(kind: int, tap_ids: Iterable[int], most: int) -> list[int]:
    """At most ``most`` of ``tap_ids``, first come first, that nobody else holds: locked until the transaction ends; sorted.

    Taking never waits, so the order in which they are taken cannot lock two workers against each other.
    """
    with connection.cursor() as cursor:
        cursor.execute(
            "SELECT id FROM unnest(%s::bigint[]) AS t(id) WHERE pg_try_advisory_xact_lock(%s, (id %% 2147483647)::int) LIMIT %s",
            [list(tap_ids), kind, most],
        )
        return sorted(row[0] for row in cursor.fetchall())


def lock_tap(kind: int, tap_id: int) -> None:
    """Wait for one tap: for a person's write that must not meet a worker half-way. Lock no second one after it."""
    with connection.cursor() as cursor:
        cursor.execute("SELECT pg_advisory_xact_lock(%s, (%s %% 2147483647)::int)", [kind, tap_id])


def lock_taps(kind: int, tap_ids: Iterable[int]) -> None:
    """Wait for several taps, in the order of their ids, so that two who do so cannot lock each other out.

    Workers try for taps and never wait for them; whoever waits holds ``lock_name("silence")`` first.
    """
    with connection.cursor() as cursor:
        for tap_id in sorted(set(tap_ids)):
            cursor.execute("SELECT pg_advisory_xact_lock(%s, (%s %% 2147483647)::int)", [kind, tap_id])


def claim_name(name: str) -> bool:
    """True if this transaction got the named job: of two beats that send the same task one does it."""
    with connection.cursor() as cursor:
        cursor.execute("SELECT pg_try_advisory_xact_lock(%s, hashtext(%s))", [BEAT, name])
        return bool(cursor.fetchone()[0])


def lock_name(name: str) -> None:
    """Wait for the named job to be free, and hold it until the transaction ends. Before `lock_tap`, never after it."""
    with connection.cursor() as cursor:
        cursor.execute("SELECT pg_advisory_xact_lock(%s, hashtext(%s))", [BEAT, name])
