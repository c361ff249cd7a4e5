"""A tap's reduced samples of a run, stretch by stretch, in bounded memory: the one reader of readings, the one reduction."""

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime
from typing import Final

import numpy as np

from analysis.models import TapCheckpoint
from analysis.record.reduce_span import knowledge_of, reduce_many
from analysis.reduce.sample import Reduced
from ingest.models import Tap
from ingest.store.days.faults import note_faults
from ingest.store.read import Hole, find_readings
from ingest.times import SECOND_US

#: About so many readings are in memory at once, and never more than two hours of them.
STRETCH_READINGS: Final = 400_000
LONGEST_STRETCH_S: Final = 7_200
SHORTEST_STRETCH_S: Final = 300
#: So many intervals before the run say how fast the tap is and what it held when the run began; a minute at least.
LEAD_INTERVALS: Final = 20
LEAST_LEAD_S: Final = 60


@dataclass(frozen=True, slots=True)
class Stretch:
    """Samples of a half-open span of whole seconds, its holes, and the time of the first sample behind it, if one is near."""

    from_us: int
    until_us: int
    samples: Reduced
    holes: tuple[Hole, ...]
    next_at_us: int | None = None


def stretches_of(tap: Tap, from_us: int, until_us: int, interval_s: float, as_of: datetime | None = None) -> Iterator[Stretch]:
    """The lead before the span, then the span, each stretch with the time of the sample that follows it.

    Args:
        interval_s: Usual time between the tap's readings.
        as_of: Calibrations as known then.
    Reads one stretch ahead, so two are in memory.
    """
    waiting: Stretch | None = None
    for found in _read(tap, from_us, until_us, interval_s, as_of):
        if waiting is not None:
            following = int(found.samples.at_us[0]) if len(found.samples) else None
            yield Stretch(waiting.from_us, waiting.until_us, waiting.samples, waiting.holes, following)
        waiting = found


def _read(tap: Tap, from_us: int, until_us: int, interval_s: float, as_of: datetime | None) -> Iterator[Stretch]:
    """Lead, stretches, and a tail that only says what comes next; the frozen-value fold goes through all of them."""
    lead_us = _whole_s(max(LEAST_LEAD_S, LEAD_INTERVALS * interval_s)) * SECOND_US
    step_us = _whole_s(min(max(STRETCH_READINGS * interval_s, SHORTEST_STRETCH_S), LONGEST_STRETCH_S)) * SECOND_US
    tail_us = _whole_s(max(10.0, 4.0 * interval_s)) * SECOND_US
    edges = [from_us - lead_us, *range(from_us, until_us, step_us), until_us, until_us + tail_us]
    knowledge = knowledge_of([tap.pk], as_of)
    checkpoint = TapCheckpoint.objects.filter(tap=tap, at_us__lte=edges[0]).order_by("-at_us").first()
    flat = checkpoint.state["flat"] if checkpoint else None
    begin_us = checkpoint.at_us if checkpoint else edges[0]
    for start_us, end_us in zip(edges, edges[1:], strict=False):
        found = find_readings(tap.pk, min(begin_us, start_us), end_us)
        note_faults(found.holes)
        many = reduce_many([tap], {tap.pk: found.readings}, knowledge, {tap.pk: flat})
        flat, begin_us = many.flat[tap.pk][-1], end_us
        samples = many.samples_of(tap.pk)
        kept = samples.take(slice(int(np.searchsorted(samples.at_us, start_us)), None))
        yield Stretch(start_us, end_us, kept, tuple(hole for hole in found.holes if hole.until_us >= start_us))


def _whole_s(seconds: float) -> int:
    return int(-(-seconds // 1))
