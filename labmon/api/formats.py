"""Tables written out piece by piece: CSV, JSON, Parquet, Arrow. No form holds more than one piece."""

import io
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager
from typing import Any

import msgspec
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet

from labmon.api.time_texts import time_texts

Tables = Iterator[pa.Table]
JSON_ROWS = 2000    # a row as a dictionary takes about 20 times its bytes in a table
TYPES = {"csv": "text/csv; charset=utf-8; header=present", "json": "application/json",
         "parquet": "application/vnd.apache.parquet", "arrow": "application/vnd.apache.arrow.stream"}


def written(form: str, schema: pa.Schema, tables: Tables, about: dict[str, Any]) -> Iterator[bytes]:
    """The tables in a form of ``TYPES``; ``about`` says what they are, in the forms that have a place for it."""
    noted = schema.with_metadata({"labmon": msgspec.json.encode(about)})
    match form:
        case "csv":
            texts = with_texts(schema.empty_table()).schema
            return _drained(lambda sink: pa.csv.CSVWriter(sink, texts), map(with_texts, tables))
        case "json":
            return _as_json(tables, about)
        case "parquet":
            return _drained(lambda sink: pa.parquet.ParquetWriter(sink, noted, compression="zstd"), tables)
        case "arrow":
            return _drained(lambda sink: pa.ipc.new_stream(sink, noted), tables)
    raise ValueError(f"form={form!r}; use one of {', '.join(TYPES)}.")


class _Pipe(io.RawIOBase):
    """Takes what a writer writes until it is fetched."""

    def __init__(self) -> None:
        self._parts: list[bytes] = []

    def writable(self) -> bool:
        return True

    def write(self, part: Any) -> int:
        self._parts.append(bytes(part))
        return len(self._parts[-1])

    def fetch(self) -> bytes:
        """What was written since the last call."""
        parts, self._parts = self._parts, []
        return b"".join(parts)


def _drained(writer_to: Callable[[_Pipe], AbstractContextManager[Any]], tables: Tables) -> Iterator[bytes]:
    pipe = _Pipe()
    with writer_to(pipe) as writer:
        for table in tables:
            writer.write_table(table)
            if part := pipe.fetch():
                yield part
    yield pipe.fetch()


def with_texts(table: pa.Table) -> pa.Table:
    """Times as RFC 3339 text, as CSV and JSON have no times."""
    for place, field in enumerate(table.schema):
        if pa.types.is_timestamp(field.type):
            table = table.set_column(place, field.name, time_texts(table.column(place)))
    return table


def _as_json(tables: Tables, about: dict[str, Any]) -> Iterator[bytes]:
    """One object: what it is, then ``readings``, a list of one object a sample."""
    head = msgspec.json.encode(about | {"readings": []})
    yield head.removesuffix(b"]}")
    comma = b""
    for table in tables:
        for rows in with_texts(table).to_batches(max_chunksize=JSON_ROWS):
            if rows.num_rows:
                yield comma + msgspec.json.encode(rows.to_pylist())[1:-1]
                comma = b","
    yield b"]}"
