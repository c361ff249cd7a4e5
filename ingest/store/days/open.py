"""Opens a day file: of what is asked only the bytes that are needed, each verified before it is used.

Footer and columns are checked against the CRC-32 kept in the database, so that damage anywhere is seen, also in what Parquet
itself does not check (page headers).
"""

import zlib
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from ingest.store.arrays import DamagedBody
from ingest.store.columns import Readings, no_readings
from ingest.store.days.layout import AT, FIXED, UNKNOWN, readings_of, wanted_names
from ingest.store.days.storage import days_storage, read_exactly
from ingest.store.days.write import chunk_ranges

_THREADS_FROM = 200_000


class MissingFile(DamagedBody):
    """The file is not there, or its storage does not answer."""


@dataclass(frozen=True, slots=True)
class DayEntry:
    """What the database knows of a file that is to be opened."""

    name: str
    size: int
    footer_size: int
    checks: bytes


def read_day(entry: DayEntry, from_us: int, until_us: int, wanted: frozenset[str] | None = None, *,
             as_sent: bool = False) -> Readings:
    """Readings of the half-open span.

    Raises:
        DamagedBody: The file is missing or not what was written.
    """
    with OpenDay(entry) as day:
        groups = day.groups_by(AT, lambda low, high: high >= from_us and low < until_us)
        return day.read(groups, wanted, as_sent=as_sent).between(from_us, until_us)


class OpenDay:
    """An open file whose footer is verified."""

    def __init__(self, entry: DayEntry) -> None:
        self.entry = entry

    def __enter__(self) -> "OpenDay":
        try:
            self._file = days_storage().open(self.entry.name, "rb")
        except OSError as error:
            raise MissingFile(f"the day file {self.entry.name} cannot be opened ({error.strerror or error})") from error
        try:
            self._bytes = np.zeros(self.entry.size, np.uint8)  # taken from the system only where it is filled
            self._checks = np.frombuffer(self.entry.checks, "<u4").tolist()
            self._fill(self.entry.size - self.entry.footer_size, self.entry.footer_size, self._checks[0], "footer")
            self.metadata = self._parquet(lambda: pq.read_metadata(pa.BufferReader(pa.py_buffer(self._bytes))))
            self._names = self.metadata.schema.names
        except BaseException:
            self._file.close()
            raise
        return self

    def __exit__(self, *fault: object) -> None:
        self._file.close()

    def columns(self) -> dict[str, str]:
        """Value columns with their dtype, as `block_columns` gives them of a block."""
        schema = self.metadata.schema.to_arrow_schema()
        found = {name: "f4" if pa.types.is_float32(schema.field(name).type) else "f8" for name in self._names
                 if name not in (*FIXED, UNKNOWN)}
        return found | ({"": ""} if UNKNOWN in self._names else {})

    def groups_by(self, column: str, is_wanted: Callable[[int, int], bool]) -> list[int]:
        """Row groups whose smallest and largest value of a column are wanted; those that do not tell are."""
        place = self._names.index(column)
        chosen = []
        for group in range(self.metadata.num_row_groups):
            found = self.metadata.row_group(group).column(place).statistics
            if found is None or not found.has_min_max or is_wanted(int(found.min_raw), int(found.max_raw)):
                chosen.append(group)
        return chosen

    def read(self, groups: list[int], wanted: frozenset[str] | None = None, *, as_sent: bool = False) -> Readings:
        """Readings of row groups, in the file's order."""
        if not groups:
            return no_readings()
        names = wanted_names(self._names, wanted)
        places = [self._names.index(name) for name in names]
        for group in groups:
            ranges = chunk_ranges(self.metadata, group)
            for place in places:
                self._fill(*ranges[place], self._checks[1 + group * len(self._names) + place], self._names[place])
        rows = sum(self.metadata.row_group(group).num_rows for group in groups)
        table = self._parquet(lambda: pq.ParquetFile(
            pa.BufferReader(pa.py_buffer(self._bytes)), metadata=self.metadata).read_row_groups(
                groups, columns=names, use_threads=rows >= _THREADS_FROM))
        if len(table) != rows:
            raise DamagedBody(f"the day file {self.entry.name} has {len(table)} readings where {rows} were written")
        return readings_of(table, as_sent=as_sent)

    def read_last(self, count: int, wanted: frozenset[str] | None = None) -> Readings:
        """The file's last readings, ``count`` or somewhat more."""
        groups: list[int] = []
        rows = 0
        for group in reversed(range(self.metadata.num_row_groups)):
            groups.insert(0, group)
            rows += self.metadata.row_group(group).num_rows
            if rows >= count:
                break
        return self.read(groups, wanted)

    def _fill(self, place: int, length: int, check: int, what: str) -> None:
        """Bytes of the file into the buffer, verified."""
        view = memoryview(self._bytes)[place:place + length]
        try:
            done = read_exactly(self._file, place, view)
        except OSError as error:
            raise MissingFile(f"the day file {self.entry.name} cannot be read ({error.strerror or error})") from error
        if done != length or zlib.crc32(view) != check:
            raise DamagedBody(f"the day file {self.entry.name} is damaged: the checksum of {what} does not fit its content")

    def _parquet(self, act: Callable[[], Any]) -> Any:
        try:
            return act()
        except (pa.ArrowException, OSError, ValueError) as error:
            raise DamagedBody(f"the day file {self.entry.name} cannot be opened: {error}") from error
