"""Kept checkpoints are thinned with age: late data are rare, the older the rarer."""

from typing import Final

from django.db import connection, transaction

from ingest.times import SECOND_US
from ingest.times import now_us as server_now_us

_DAY_US: Final = 86_400 * SECOND_US
#: Older than this: one checkpoint each so often is kept.
STEPS: Final = ((1 * _DAY_US, 3600 * SECOND_US), (60 * _DAY_US, _DAY_US))


@transaction.atomic
def prune_checkpoints(now_us: int | None = None) -> int:
    """Drop checkpoints that lie between those to keep; a tap's first stays. Returns how many went."""
    clock_us = server_now_us() if now_us is None else now_us
    dropped = 0
    with connection.cursor() as cursor:
        for older_us, every_us in STEPS:
            cursor.execute(
                """
                DELETE FROM analysis_tapcheckpoint point WHERE at_us < %s AND at_us %% %s <> 0
                AND at_us <> (SELECT min(at_us) FROM analysis_tapcheckpoint WHERE tap_id = point.tap_id)""",
                [clock_us - older_us, every_us],
            )
            dropped += cursor.rowcount
            cursor.execute(
                "DELETE FROM labmon_foldcheckpoint WHERE NOT is_newest AND at_us < %s AND at_us %% %s <> 0",
                [clock_us - older_us, every_us],
            )
            dropped += cursor.rowcount
    return dropped
