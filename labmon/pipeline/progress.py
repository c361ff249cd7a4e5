"""One tap's step through one stretch: which seconds are complete, and what the tap's own state is behind it."""

from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from analysis.judge.interval import pass_samples
from analysis.judge.presence import CADENCE_COUNT
from analysis.record.tap_state import TapState
from ingest.store.columns import Readings
from ingest.store.read import Found
from ingest.times import SECOND_US
from labmon.alarms.settle import CURRENT_WITHIN_US, TapHere
from labmon.pipeline.save import NowRow
from labmon.pipeline.stretch import KEEP_EVERY_US, SNAPSHOT_EVERY_US, Stretch
from labmon.pipeline.work import TapWork, floor_s

if TYPE_CHECKING:
    from labmon.pipeline.judge import Judged

#: A tap's last second counts as complete when nothing came for this long. The tap's interval does not count: a slow tap has
#: one reading in a second, which would else stay open until about its next one.
QUIET_US: Final = 2 * SECOND_US
CURRENT_INTERVALS: Final = 3.0


@dataclass(frozen=True)
class Progress:
    """A stretch with its readings and the server's clock.

    Attributes:
        complete_us: Seconds before it are complete; what comes for them later is late.
        holes: Spans (both ends included) of which raw readings are no longer kept or cannot be read.
        cut_us: Within the stretch the last moment worth a checkpoint or a snapshot (else the start).
    """

    stretch: Stretch
    readings: Readings
    complete_us: int
    cut_us: int
    now_us: int
    holes: tuple[tuple[int, int], ...] = ()

    @property
    def work(self) -> TapWork:
        return self.stretch.work

    @property
    def tap(self) -> TapHere:
        return self.stretch.work.tap

    @cached_property
    def last_us(self) -> int:
        """Data time of the stretch's last reading (its end where it has none)."""
        return int(self.readings.at_us[-1]) if len(self.readings) else self.stretch.end_us

    @cached_property
    def age_us(self) -> int:
        """Age of the last reading now: by the station's clock until it was sent, by the server's since it came."""
        if not len(self.readings):
            return CURRENT_WITHIN_US + 1
        lateness_us = max(int(self.readings.sent_us[-1]) - self.last_us, 0)
        return max(self.now_us - int(self.readings.arrival_us[-1]), 0) + lateness_us

    @property
    def current_within_us(self) -> int:
        """Readings older than this are past."""
        return max(CURRENT_WITHIN_US, round(CURRENT_INTERVALS * self.work.interval_s * SECOND_US))

    @property
    def is_current(self) -> bool:
        return self.stretch.is_newest and self.age_us <= self.current_within_us

    @cached_property
    def _interval_states(self) -> tuple[Any, Any]:
        """The interval fold at the cut and at the complete seconds' end."""
        at_us = self.readings.at_us
        cut, complete = np.searchsorted(at_us, [self.cut_us, self.complete_us])
        at_cut = pass_samples(self.work.state.interval, at_us[:cut])
        return at_cut, pass_samples(at_cut, at_us[cut:complete])

    def state_behind(self, flat: list[Any], judged: "Judged") -> TapState:
        """The tap's state behind the complete seconds."""
        before = self.work.state
        arrivals = (*before.arrivals_us, *self._new_arrivals())[-CADENCE_COUNT:]
        untrusted, untrusted_upto_us = judged.untrusted_states.get(self.tap.pk, (before.untrusted, before.untrusted_upto_us))
        state = replace(
            before,
            upto_us=self.complete_us,
            flat=flat[1],
            interval=self._interval_states[1],
            arrivals_us=arrivals,
            untrusted=untrusted,
            untrusted_upto_us=untrusted_upto_us,
        )
        return state.with_snapshot(self.cut_us, flat[0]) if self.cut_us > self.stretch.start_us else state

    def _new_arrivals(self) -> list[int]:
        known = self.work.state.arrivals_us[-1] if self.work.state.arrivals_us else -1
        return np.unique(self.readings.arrival_us[self.readings.arrival_us > known])[-CADENCE_COUNT:].tolist()

    def now_row(self, flat: list[Any], judged: "Judged", now_us: int) -> NowRow:
        """The tap's row of newest sample and state."""
        is_newer = len(self.readings) > 0 and (self.work.now_us is None or self.last_us >= self.work.now_us)
        return NowRow(
            self.tap.pk,
            self.last_us,
            judged.newest_samples[self.tap.pk] if is_newer else None,
            self.state_behind(flat, judged),
            self._open_until_us(now_us),
        )

    def _open_until_us(self, now_us: int) -> int | None:
        """When the last second will count as complete; None if it does."""
        if not self.stretch.is_newest or not len(self.readings) or self.complete_us > self.last_us:
            return None
        return max(quiet_from_us(self.readings), now_us + 1)

    def kept_states(self, flat: list[Any]) -> list[tuple[int, int, TapState]]:
        """Checkpoints to keep: at the tap's very beginning, and at the cut where it is a whole ten minutes."""
        kept = []
        if self.work.begins_anew and len(self.readings):
            kept.append((self.tap.pk, self.stretch.start_us, TapState(upto_us=self.stretch.start_us)))
        if self.keeps_cut:
            kept.append(
                (
                    self.tap.pk,
                    self.cut_us,
                    replace(
                        self.work.state,
                        upto_us=self.cut_us,
                        flat=flat[0],
                        interval=self._interval_states[0],
                        arrivals_us=(),
                        snapshots=(),
                    ),
                )
            )
        return kept

    @property
    def keeps_cut(self) -> bool:
        """True if the cut is a moment to keep."""
        return self.cut_us > self.stretch.start_us and self.cut_us % KEEP_EVERY_US == 0

    def due_span(self) -> tuple[int, int, int] | None:
        """What the marks named, for the rollups; the rest of a long stretch is marked again."""
        first_us, last_us = self.work.touched.first_us, self.work.touched.last_us
        if first_us is None or last_us is None:
            return None
        return (self.tap.pk, first_us, last_us if self.stretch.is_newest else min(last_us, self.stretch.end_us - 1))

    def rest(self) -> tuple[int, int, int, int] | None:
        """A mark for what lies behind a stretch that does not reach the newest reading."""
        if self.stretch.is_newest:
            return None
        touched = self.work.touched
        newest_us = max(touched.newest_us or 0, touched.last_us or 0, self.stretch.end_us)
        return (self.tap.pk, max(touched.first_us or 0, self.stretch.end_us), newest_us, touched.last_arrival_us or self.now_us)


def progress_of(stretch: Stretch, found: Found, now_us: int) -> Progress:
    """How far the stretch's seconds are complete: by later readings, by silence, or by its own end."""
    readings = found.readings
    complete_us = stretch.end_us
    if stretch.is_newest:
        complete_us = stretch.start_us
        if len(readings):
            open_us = floor_s(int(readings.at_us[-1]))
            complete_us = open_us + SECOND_US if now_us >= quiet_from_us(readings) else open_us
    complete_us = max(complete_us, stretch.start_us)
    holes = tuple((hole.from_us, hole.until_us) for hole in found.holes)
    return Progress(stretch, readings, complete_us, _cut(stretch.start_us, complete_us), now_us, holes)


def quiet_from_us(readings: Readings) -> int:
    """When the server's clock is a little past the newest arrival."""
    return int(readings.arrival_us.max()) + QUIET_US


def _cut(start_us: int, complete_us: int) -> int:
    for every_us in (KEEP_EVERY_US, SNAPSHOT_EVERY_US):
        last_us = complete_us // every_us * every_us
        if last_us > start_us:
            return last_us
    return start_us
