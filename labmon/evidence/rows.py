"""A tap's readings of a run as tables, piece by piece, with what was known just before them."""

import math
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

import numpy as np
import pyarrow as pa

from analysis.judge.interval import IntervalState, pass_samples
from analysis.models import TapCheckpoint
from analysis.record.reduce_span import Knowledge, knowledge_of, reduce_many
from analysis.reduce.sample import Reduced
from ingest.models import Tap, TapBoot
from ingest.store.columns import Readings, no_readings
from ingest.store.days.faults import note_faults
from ingest.store.read import Hole, find_readings
from labmon.api.chunks import chunks_of
from labmon.api.table import table_of
from labmon.benches.pace import interval_of
from labmon.runs.samples import LEAD_INTERVALS, LEAST_LEAD_S

IDENTITY = ("at", "boot", "sequence", "own_at", "arrival_at", "is_server_timed")
MADE = ("er_db", "is_lower_bound", "is_upper_bound", "angle_deg", "dop", "power_w", "er_db_trust", "er_db_reasons",
        "angle_deg_trust", "dop_trust", "power_w_trust")


def _lead_us(tap: Tap) -> int:
    """So far before the run the ledger looks for the reading that holds into it."""
    return math.ceil(max(LEAST_LEAD_S, LEAD_INTERVALS * interval_of(tap))) * 1_000_000


def _tail_us(tap: Tap) -> int:
    """So far behind the run it looks for the reading that ends the hold of the last one (as labmon/runs/samples.py does)."""
    return math.ceil(max(10.0, 4.0 * interval_of(tap))) * 1_000_000


@dataclass(slots=True)
class TapRows:
    """The readings that a run's seconds of one tap rest on: from the last one before it up to the first one behind it.

    Attributes:
        flat, interval: Frozen-value counters and spacings before the first row. row_count, first_us, last_us: Of what was given.
        holes: Where readings are no longer kept or cannot be read.
    """

    tap: Tap
    from_us: int
    until_us: int
    knowledge: Knowledge
    flat: Any = None
    interval: IntervalState = field(default_factory=IntervalState)
    row_count: int = 0
    holes: list[Hole] = field(default_factory=list)
    _flat_now: Any = None
    _lead_us: int = 0
    _names: dict[int, str] = field(default_factory=dict)

    @classmethod
    def of(cls, tap: Tap, from_us: int, until_us: int, as_of: datetime | None = None) -> "TapRows":
        """Ready to be read: what lies before the run has been passed."""
        rows = cls(tap, from_us, until_us, knowledge_of([tap.pk], as_of))
        rows._pass_what_lies_before()
        return rows

    def pieces(self) -> Iterator[tuple[Readings, Reduced]]:
        """The readings and what they mean, in order; once."""
        for from_us, until_us in chunks_of(self.tap.pk, self._lead_us, self.until_us + _tail_us(self.tap)):
            readings = self._found(from_us, until_us)
            behind = int(np.searchsorted(readings.at_us, self.until_us))
            readings = readings.pick(slice(0, behind + 1))
            reduced, self._flat_now = self._reduced(readings, self._flat_now)
            self.row_count += len(readings)
            if len(readings):
                yield readings, reduced
            if behind < len(readings):
                return

    def table(self, readings: Readings, reduced: Reduced) -> pa.Table:
        """A piece as the package keeps it: raw columns as sent, and what was made of them."""
        missing = set(readings.boot_id.tolist()) - self._names.keys()
        if missing:
            self._names.update(TapBoot.objects.filter(pk__in=missing).values_list("pk", "station_boot__boot"))
        whole = table_of(self.tap, readings, reduced, self._names)
        return whole.select([name for name in whole.column_names if name in IDENTITY or name[:4] == "raw_" or name in MADE])

    def no_rows(self) -> pa.Schema:
        """The columns of every table."""
        empty = no_readings()
        return self.table(empty, self._reduced(empty, None)[0]).schema

    def _pass_what_lies_before(self) -> None:
        """Frozen-value counters from the last checkpoint, spacings from the lead: as the ledger itself begins."""
        lead_from_us = self.from_us - _lead_us(self.tap)
        checkpoint = TapCheckpoint.objects.filter(tap=self.tap, at_us__lte=lead_from_us).order_by("-at_us").first()
        self.flat = flat = checkpoint.state["flat"] if checkpoint else None
        interval, self._lead_us = self.interval, self.from_us
        for from_us, until_us in chunks_of(self.tap.pk, checkpoint.at_us if checkpoint else lead_from_us, self.from_us):
            readings = self._found(from_us, until_us)
            if not len(readings):
                continue
            last_us = int(readings.at_us[-1])
            before = readings.between(0, last_us)
            if last_us >= lead_from_us:
                self._lead_us, self.flat = last_us, self._flat_behind(before, flat)
                self.interval = pass_samples(interval, before.between(lead_from_us, last_us).at_us)
                interval = pass_samples(interval, readings.between(lead_from_us, self.from_us).at_us)
            flat = self._flat_behind(readings, flat)
            if last_us < lead_from_us:
                self.flat = flat
        self._flat_now = self.flat

    def _flat_behind(self, readings: Readings, flat: Any) -> Any:
        return self._reduced(readings, flat)[1] if len(readings) else flat

    def _found(self, from_us: int, until_us: int) -> Readings:
        found = find_readings(self.tap.pk, from_us, until_us)
        note_faults(found.holes)
        self.holes += [hole for hole in found.holes if hole.until_us >= self.from_us and hole.from_us < self.until_us]
        return found.readings

    def _reduced(self, readings: Readings, flat: Any) -> tuple[Reduced, Any]:
        made = reduce_many([self.tap], {self.tap.pk: readings}, self.knowledge, {self.tap.pk: flat})
        return made.samples_of(self.tap.pk), made.flat[self.tap.pk][-1]
