"""Reading a file into the store: every row becomes a stored, a known or a set-aside reading (docs/files.md)."""

import logging
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import BinaryIO

import numpy as np
from django.db import connection, transaction
from django.utils import timezone

from ingest.announce import announce
from ingest.files.aside import set_rows_aside
from ingest.files.columns import COLUMNS
from ingest.files.faults import FileFault, MappingError, MappingFault, RefusedRow
from ingest.files.grown import Resume
from ingest.files.mapping import Mapping, mapping_of
from ingest.files.once import FileSoFar, Keys, judge_part, keys_of
from ingest.files.origin import boot_of, next_sequence, rival_boots
from ingest.files.parse import ROWS_A_CHUNK, FileReader, FileRows
from ingest.models import FileImport
from ingest.store.append import write_blocks
from ingest.store.read import read_readings
from ingest.times import now_us

log = logging.getLogger(__name__)

ROWS_TO_JUDGE_BY = 100
_CONTRADICTED = ("another value is held for this instant, read in with another mapping or without identity",
                 "the first value stays; if the new mapping is the right one, read the file into a new tap")

OnProgress = Callable[[FileImport], None]


class ReadWhole(RuntimeError):
    """The rest of a grown file does not tell enough; read the whole file."""


@dataclass(slots=True)
class Order:
    """Whether the rows came in the order of their times, and the last time."""

    is_kept: bool = True
    last_at_us: int | None = None

    def follow(self, at_us: np.ndarray) -> None:
        """The next rows."""
        if len(at_us):
            first_us = at_us[0] if self.last_at_us is None else self.last_at_us
            self.is_kept = self.is_kept and bool(at_us[0] >= first_us and (np.diff(at_us) >= 0).all())
            self.last_at_us = max(int(at_us.max()), int(first_us))


class ImportBusy(RuntimeError):
    """Another file is being read in for this tap; try again when it is done."""


@dataclass(frozen=True, slots=True)
class ImportCounts:
    """What became of a file's lines: ``rows`` = stored + known + set_aside."""

    rows: int
    stored: int
    known: int
    set_aside: int
    lines_left_out: int


def import_file(record: FileImport, raw: BinaryIO, *, on_progress: OnProgress = lambda record: None,
                resume: Resume | None = None, order: Order | None = None) -> ImportCounts:
    """Read the whole file in with the mapping kept in ``record``; may be stopped and run again at any time.

    Args:
        resume: ``raw`` is the rest of a file that was read before (`ingest.files.grown`): counts go on from the record's.
        order: Follows the rows' times.
    Raises:
        ReadWhole: The rest may not be taken alone; nothing of its first part was stored.
        MappingError: The mapping does not fit the file; nothing was stored.
        FileFault: The file cannot be read on; what came before stays stored.
        ImportBusy: See there.
    """
    with _alone_on(record.tap_id):
        try:
            return _Import(record, raw, on_progress, resume, order or Order()).run()
        except (MappingError, FileFault) as fault:
            record.error, record.finished_at = str(fault)[:500], timezone.now()
            record.save(update_fields=["error", "finished_at"])
            raise
        finally:
            announce()


class _Import:
    """One run over one file."""

    def __init__(self, record: FileImport, raw: BinaryIO, on_progress: OnProgress, resume: Resume | None, order: Order) -> None:
        tap = record.tap
        self._resume, self._order = resume, order
        self._record, self._tap, self._on_progress = record, tap, on_progress
        self._mapping: Mapping = mapping_of(record.rules or {}, kind=tap.kind, unit=tap.unit)
        self._boot = boot_of(self._mapping)
        self._file = FileReader(raw, self._mapping, kind=tap.kind, unit=tap.unit, shift=resume.shift if resume else 0)
        self._so_far = FileSoFar()
        if resume is None:
            record.rows_done = record.stored = record.known = record.set_aside = 0
        record.error, record.finished_at = "", None

    def run(self) -> ImportCounts:
        for number, part in enumerate(self._file.parts(ROWS_A_CHUNK)):
            if number == 0 and self._resume is None:
                _check_fit(part)
            self._check_reach(part, is_first=number == 0)
            self._take(part)
            self._on_progress(self._record)
            announce()
        record = self._record
        record.rows_total, record.finished_at = record.rows_done, timezone.now()
        record.save(update_fields=["rows_total", "rows_done", "stored", "known", "set_aside", "error", "finished_at"])
        counts = ImportCounts(record.rows_done, record.stored, record.known, record.set_aside, self._file.lines_left_out)
        log.info("file_imported", extra={"tap_id": record.tap_id, "rows": counts.rows, "stored": counts.stored,
                                         "known": counts.known, "set_aside": counts.set_aside})
        return counts

    def _check_reach(self, part: FileRows, *, is_first: bool) -> None:
        """Of a rest: the lines read before reach back before the first new instant, and nothing new lies before them."""
        self._order.follow(part.at_us)
        if self._resume is None or not len(part):
            return
        is_new = part.line > self._resume.through_line
        if not self._order.is_kept or (is_first and is_new.any() and part.at_us[is_new].min() <= part.at_us[0]):
            raise ReadWhole

    @transaction.atomic
    def _take(self, part: FileRows) -> None:
        keys = keys_of(part.at_us, part.columns, COLUMNS[self._tap.kind])
        held, held_by_rival = self._held_at(keys)
        verdict = judge_part(keys, earlier=self._so_far.at_instants_of(keys), held=held, held_by_rival=held_by_rival)
        self._so_far.add(keys)
        refused = part.refused + self._contradicted(part, verdict.is_contradicted)
        set_rows_aside(self._record, self._boot, refused)
        stored = self._store(part, ~verdict.is_known & ~verdict.is_contradicted)
        record = self._record
        through = self._resume.through_line if self._resume else 0
        is_counted = part.line > through
        aside = sum(row.line > through for row in refused)
        record.stored += stored
        record.known += int((verdict.is_known & is_counted).sum())
        record.set_aside += aside
        record.rows_done = record.stored + record.known + record.set_aside
        record.save(update_fields=["rows_done", "stored", "known", "set_aside", "error", "finished_at"])

    def _held_at(self, keys: Keys) -> tuple[Keys, np.ndarray]:
        """What the store holds at the part's instants, and which of it came another way without identity of its own."""
        if not len(keys.at_us):
            return keys, np.zeros(0, bool)
        names = COLUMNS[self._tap.kind]
        held = read_readings(self._tap.pk, int(keys.at_us.min()), int(keys.at_us.max()) + 1, columns=names)
        held = held.pick(np.isin(held.at_us, keys.at_us))
        return keys_of(held.at_us, held.columns, names), np.isin(held.boot_id, rival_boots(self._tap, self._boot))

    def _contradicted(self, part: FileRows, which: np.ndarray) -> list[RefusedRow]:
        return [RefusedRow(int(part.line[index]), part.text[index], "time", *_CONTRADICTED) for index in np.flatnonzero(which)]

    def _store(self, part: FileRows, which: np.ndarray) -> int:
        count = int(which.sum())
        if not count:
            return 0
        start = next_sequence(self._tap, self._boot)
        columns = {name: values[which] for name, values in part.columns.items()}
        return write_blocks(self._tap, part.at_us[which], columns, boot=self._boot, arrival_us=now_us(),
                            sequence=np.arange(start, start + count, dtype=np.int64))


def _check_fit(part: FileRows) -> None:
    """Stop at once where none of the first rows is a reading."""
    first = part.refused[:ROWS_TO_JUDGE_BY]
    if len(first) == ROWS_TO_JUDGE_BY and (not len(part) or part.line[0] > first[-1].line):
        raise MappingError([MappingFault(
            "mapping", None, f"none of the first {ROWS_TO_JUDGE_BY} rows is a reading; line {first[0].line}, "
            f"{first[0].field}: {first[0].why}", "correct the mapping; nothing was read in")])


@contextmanager
def _alone_on(tap_id: int) -> Iterator[None]:
    name = f"labmon file import {tap_id}"
    with connection.cursor() as cursor:
        cursor.execute("SELECT pg_try_advisory_lock(hashtextextended(%s, 0))", [name])
        if not cursor.fetchone()[0]:
            raise ImportBusy("another file is being read in for this tap; try again when it is done")
    try:
        yield
    finally:
        with connection.cursor() as cursor:
            cursor.execute("SELECT pg_advisory_unlock(hashtextextended(%s, 0))", [name])
