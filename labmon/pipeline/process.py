"""The way of a reading after the door, in one screenful: claim, read, reduce, show, judge, act, mark, forget the marks.

Everything of a chunk of taps is one transaction; done twice it changes nothing. The marks (Touch rows) are the truth of
what is undone; whoever calls, and how often, does not matter.
"""

import logging
import time
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from django.db import connection, transaction

from analysis.record.reduce_span import ManyReduced, knowledge_of, reduce_many
from ingest.store.columns import Readings
from ingest.store.days.faults import note_faults
from ingest.store.read import find_many
from ingest.times import now_us as server_now_us
from labmon.alarms.settle import settle
from labmon.alarms.untrusted import settle_untrusted
from labmon.claims import JUDGING, claim_taps
from labmon.live.publish import publish
from labmon.pipeline.judge import Judged, judge
from labmon.pipeline.progress import Progress, progress_of
from labmon.pipeline.save import forget_kept, mark_rollups_due, save_now, save_standings, save_tap_checkpoints, settle_touches
from labmon.pipeline.stretch import Stretch, plan_stretches
from labmon.pipeline.work import load_work

CHUNK_TAPS: Final = 256
MOST_CANDIDATES: Final = 4_096
#: About so many readings go through memory at once.
CHUNK_READINGS: Final = 600_000
log = logging.getLogger(__name__)


@dataclass(slots=True)
class Processed:
    """What a run did: tap visits, readings reduced, alarms changed."""

    taps: int = 0
    readings: int = 0
    alarms: int = 0

    def __iadd__(self, other: "Processed") -> "Processed":
        self.taps, self.readings, self.alarms = self.taps + other.taps, self.readings + other.readings, self.alarms + other.alarms
        return self


def process_touched(now_us: int | None = None, *, for_s: float = float("inf"), is_paced: bool = False) -> Processed:
    """Judge what is marked until nothing is (or ``for_s`` seconds are over); returns what was done.

    Args:
        now_us: The server's clock; tests give their own.
        is_paced: With many taps marked, leave each until its oldest mark has waited a little (see `patience_us`).
    """
    total, began = Processed(), time.monotonic()
    while time.monotonic() - began < for_s:
        step = _process_chunk(server_now_us() if now_us is None else now_us, is_paced)
        if step is None:
            break
        total += step
    return total


@transaction.atomic
def _process_chunk(now_us: int, is_paced: bool) -> Processed | None:
    """One chunk of taps; None where nothing is marked that nobody else works on."""
    tap_ids = claim_taps(JUDGING, _candidates(now_us, is_paced), CHUNK_TAPS)
    if not tap_ids:
        return None
    stretches = _affordable(plan_stretches(load_work(tap_ids)))
    found = find_many({one.work.tap.pk: (one.start_us, one.end_us) for one in stretches})
    note_faults(hole for one in found.values() for hole in one.holes)
    readings = {tap_id: one.readings for tap_id, one in found.items()}
    steps = [progress_of(one, found[one.work.tap.pk], now_us) for one in stretches]
    reduced = reduce_many(
        [step.tap for step in steps],
        readings,
        knowledge_of(one.work.tap.pk for one in stretches),
        {step.tap.pk: step.work.state.flat for step in steps},
        {step.tap.pk: (step.cut_us, step.complete_us) for step in steps},
    )
    judged = judge(steps, reduced, readings)
    alarm_ids = settle(judged.findings) + settle_untrusted(judged.untrusted, now_us)
    _save(steps, reduced, readings, judged, now_us)
    _tell(steps, alarm_ids)
    return Processed(len(steps), sum(len(one) for one in readings.values()), len(alarm_ids))


def _candidates(now_us: int, is_paced: bool) -> list[int]:
    """Taps with marks, longest waiting first, and taps whose last second is complete by now."""
    with connection.cursor() as cursor:
        cursor.execute(
            """
            SELECT tap_id, min(arrival_us) FROM (SELECT tap_id, id, arrival_us FROM ingest_touch
                                                 UNION ALL SELECT tap_id, 0, 0
                                                     FROM analysis_tapnow WHERE open_until_us <= %s) AS due
            WHERE EXISTS (SELECT FROM ingest_tap WHERE id = tap_id) GROUP BY tap_id ORDER BY min(id) LIMIT %s""",
            [now_us, MOST_CANDIDATES],
        )
        marked = cursor.fetchall()
    waited_since_us = now_us - patience_us(len(marked)) if is_paced else None
    return [tap_id for tap_id, since_us in marked if waited_since_us is None or since_us <= waited_since_us]


def patience_us(marked: int) -> int:
    """How long a mark waits when so many taps are marked, µs.

    A visit to a tap costs much the same for one reading or for ten, so with many taps each is visited a little less
    often: 0 up to 100 taps, then 1.5 ms for each more, at most 1.2 s (a reading is judged within 2 s all the same).
    """
    return min(max(marked - 100, 0) * 1_500, 1_200_000)


def _affordable(stretches: Sequence[Stretch]) -> list[Stretch]:
    """As many as memory allows, at least one; the others' marks stay for the next chunk."""
    chosen, expected = [], 0.0
    for stretch in sorted(stretches, key=lambda one: one.expected_readings):
        expected += stretch.expected_readings
        if chosen and expected > CHUNK_READINGS:
            break
        chosen.append(stretch)
    return chosen


def _save(steps: Sequence[Progress], reduced: ManyReduced, readings: dict[int, Readings], judged: Judged, now_us: int) -> None:
    forget_kept([(step.tap.pk, step.stretch.start_us, step.complete_us) for step in steps if step.stretch.is_again])
    save_now(
        [
            step.now_row(reduced.flat[step.tap.pk], judged, now_us)
            for step in steps
            if len(readings[step.tap.pk]) or step.work.now_us is not None
        ]
    )
    save_tap_checkpoints([kept for step in steps for kept in step.kept_states(reduced.flat[step.tap.pk])])
    save_standings(judged.newest, judged.kept)
    mark_rollups_due([span for step in steps if (span := step.due_span()) is not None])
    settle_touches(
        [touch for step in steps for touch in step.work.touched.ids],
        [rest for step in steps if (rest := step.rest()) is not None],
    )


def _tell(steps: Sequence[Progress], alarm_ids: list[int]) -> None:
    publish({"kind": "tap", "ids": [step.tap.pk for step in steps if step.stretch.is_newest]})
    if alarm_ids:
        publish({"kind": "alarm", "ids": alarm_ids})
        log.info("alarms_changed", extra={"alarm_ids": alarm_ids})
