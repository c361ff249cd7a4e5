"""Writes the pieces of a day into a Parquet file, choosing for each column the encoding that makes it smallest."""

import hashlib
import io
import zlib
from collections.abc import Mapping
from dataclasses import dataclass
from typing import IO, Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from ingest.store.columns import NO_SEQUENCE, Readings
from ingest.store.days.layout import ARRIVAL, AT, BOOT, BOOT_ID, FIXED, OWN, SENT, SEQUENCE, TIMED, UNKNOWN, table_of

PIECE_READINGS = 30_000
"""Readings of a row group, at least: smaller ones cost more for their description than they save at reading."""
_INTEGERS = (AT, SEQUENCE, OWN, ARRIVAL, SENT)
_BY_DICTIONARY = (BOOT, BOOT_ID, UNKNOWN)
_COMPRESSION = {"compression": "zstd", "compression_level": 1, "write_page_checksum": True}


@dataclass(frozen=True, slots=True)
class Written:
    """What is to be known of a written file.

    Attributes:
        checks: CRC-32 of the footer and of each column of each row group, ``<u4``.
        content: Digest of the readings themselves, to compare with what is read back.
        boots: (boot id, smallest, largest sequence) of boots with numbered readings.
    """

    size: int
    footer_size: int
    checks: bytes
    sha256: bytes
    count: int
    first_at_us: int
    last_at_us: int
    content: bytes
    boots: list[tuple[int, int, int]]


class DayWriter:
    """Takes a day's readings in order, a piece at a time, and writes them to ``sink``."""

    def __init__(self, sink: IO[bytes], schema: pa.Schema, boots: Mapping[int, str]) -> None:
        self._sink, self._schema, self._boots = sink, schema, boots
        self._writer: pq.ParquetWriter | None = None
        self._content = hashlib.sha256()
        self._spans: dict[int, tuple[int, int]] = {}
        self._count, self._first_us, self._last_us = 0, 0, 0

    def add(self, readings: Readings) -> None:
        """One row group; at least one reading, none before those already written."""
        table = table_of(readings, self._schema, self._boots)
        if self._writer is None:
            self._first_us = int(readings.at_us[0])
            self._writer = pq.ParquetWriter(self._sink, self._schema, **_COMPRESSION, **_encodings(table),
                                            write_statistics=[AT, SEQUENCE], store_schema=True)
        elif int(readings.at_us[0]) < self._last_us:
            raise ValueError(f"a piece from {int(readings.at_us[0])} us comes after {self._last_us} us; write in order.")
        self._writer.write_table(table, row_group_size=len(table))
        add_content(self._content, readings)
        self._count, self._last_us = self._count + len(readings), int(readings.at_us[-1])
        for boot, low, high in sequence_spans(readings):
            known = self._spans.get(boot, (low, high))
            self._spans[boot] = (min(low, known[0]), max(high, known[1]))

    def finish(self) -> Written:
        """Close the file and tell what is in it; the sink stays open."""
        assert self._writer is not None, "a day file holds at least one reading"
        self._writer.close()
        size, footer_size, checks, sha256 = checks_of(self._sink)
        return Written(size, footer_size, checks, sha256, self._count, self._first_us, self._last_us, self._content.digest(),
                       [(boot, low, high) for boot, (low, high) in sorted(self._spans.items())])


def _encodings(table: pa.Table) -> dict[str, Any]:
    """How to write each column: differences for whole numbers; for values whatever makes the first piece smallest."""
    encodings = dict.fromkeys(_INTEGERS, "DELTA_BINARY_PACKED")
    dictionaries = [name for name in _BY_DICTIONARY if name in table.column_names]
    for name in table.column_names:
        if name not in FIXED and name != UNKNOWN:
            chosen = _smallest(table.select([name]))
            if chosen is None:
                dictionaries.append(name)
            else:
                encodings[name] = chosen
    return {"use_dictionary": dictionaries, "column_encoding": encodings | {TIMED: "PLAIN"}}


def _smallest(column: pa.Table) -> str | None:
    """The encoding for a column of values; None for a dictionary of them."""
    sizes = {}
    for encoding in (None, "BYTE_STREAM_SPLIT", "PLAIN"):
        trial = io.BytesIO()
        how = ({"use_dictionary": True} if encoding is None
               else {"use_dictionary": False, "column_encoding": {column.column_names[0]: encoding}})
        pq.write_table(column, trial, **_COMPRESSION, **how)
        sizes[encoding] = trial.tell()
    return min(sizes, key=lambda encoding: sizes[encoding])


def checks_of(file: IO[bytes]) -> tuple[int, int, bytes, bytes]:
    """Size, size of the footer, checks and SHA-256 of a whole Parquet file."""
    metadata = pq.read_metadata(file)
    size = file.seek(0, io.SEEK_END)
    footer_size = footer_size_of(file, size)
    digest = hashlib.sha256()
    ranges = [(size - footer_size, footer_size), *(one for group in range(metadata.num_row_groups)
                                                   for one in chunk_ranges(metadata, group))]
    checks = np.array([zlib.crc32(_read(file, place, length)) for place, length in ranges], "<u4").tobytes()
    file.seek(0)
    while part := file.read(1 << 20):
        digest.update(part)
    return size, footer_size, checks, digest.digest()


def chunk_ranges(metadata: pq.FileMetaData, group: int) -> list[tuple[int, int]]:
    """(first byte, bytes) of each column of a row group."""
    found = []
    row_group = metadata.row_group(group)
    for number in range(metadata.num_columns):
        column = row_group.column(number)
        start = column.dictionary_page_offset if column.has_dictionary_page else column.data_page_offset
        found.append((start, column.total_compressed_size))
    return found


def footer_size_of(file: IO[bytes], size: int) -> int:
    """Bytes of the description at the end, with its length and the closing mark (Parquet format, "File Format")."""
    return int.from_bytes(_read(file, size - 8, 4), "little") + 8


def _read(file: IO[bytes], place: int, length: int) -> bytes:
    file.seek(place)
    return file.read(length)


def add_content(digest: Any, readings: Readings) -> None:
    """Go on with a digest of readings: every bit of every column, whatever order the columns have."""
    digest.update(b"%d" % len(readings))
    for array in (readings.at_us, readings.boot_id, readings.sequence, readings.own_at_us, readings.arrival_us, readings.sent_us,
                  readings.is_server_timed):
        digest.update(np.ascontiguousarray(array).data)
    for name in sorted(readings.columns):
        values = readings.columns[name].astype(np.float64, copy=False)
        if not np.isnan(values).all():
            digest.update(name.encode())
            digest.update(np.ascontiguousarray(values).data)
    if readings.unknown is not None and (readings.unknown != "").any():
        digest.update("\x1f".join(readings.unknown.tolist()).encode("utf-8", "surrogatepass"))


def sequence_spans(readings: Readings) -> list[tuple[int, int, int]]:
    """(boot id, smallest, largest sequence) of each boot with numbered readings."""
    numbered = readings.sequence != NO_SEQUENCE
    boots, sequences = readings.boot_id[numbered], readings.sequence[numbered]
    found = []
    for boot in np.unique(boots).tolist():
        own = sequences[boots == boot]
        found.append((boot, int(own.min()), int(own.max())))
    return found
