"""Readings of a span, as they stream in: no more than one piece is held unless you ask for all."""

import http.client
import io
import json
import os
import shutil
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa
import pyarrow.ipc

from labmon_notebook.door import away
from labmon_notebook.frames import TIME

NULLABLE = {pa.int64(): pd.Int64Dtype(), pa.string(): pd.StringDtype()}
FORMATS = {".csv": "csv", ".json": "json", ".parquet": "parquet", ".arrow": "arrow"}


class NotKept(UserWarning):
    """Days of the span whose raw readings labmon no longer keeps: the answer has a hole there."""


def frames_of(answer: io.BufferedIOBase, address: str) -> Iterator[pd.DataFrame]:
    """The pieces of an Arrow stream as frames by time; the first is empty and shows the columns."""
    with _breaking_off(address), pa.ipc.open_stream(answer) as stream:
        about = json.loads((stream.schema.metadata or {}).get(b"labmon", b"{}"))
        _warn_of_holes(about)
        yield _frame(stream.schema.empty_table(), about)
        while True:
            try:
                batch = stream.read_next_batch()
            except StopIteration:
                return
            yield _frame(pa.Table.from_batches([batch]), about)


def joined(frames: Iterator[pd.DataFrame]) -> pd.DataFrame:
    """All pieces as one frame."""
    parts = list(frames)
    whole = pd.concat([part for part in parts if len(part)] or parts[:1])
    whole.attrs = parts[0].attrs
    return whole


def save(answer: io.BufferedIOBase, path: Path, address: str) -> Path:
    """The answer in a file, which appears only when it is whole."""
    part = path.with_name(path.name + ".part")
    try:
        with _breaking_off(address), part.open("wb") as file:
            shutil.copyfileobj(answer, file, 1 << 20)
        os.replace(part, path)
    finally:
        part.unlink(missing_ok=True)
    return path


def format_of(path: Path) -> str:
    """The format that a file's name asks for.

    Raises:
        ValueError: None does.
    """
    if path.suffix not in FORMATS:
        raise ValueError(f"path={str(path)!r} says no format; let it end with {', '.join(FORMATS)}.")
    return FORMATS[path.suffix]


@contextmanager
def _breaking_off(address: str) -> Iterator[None]:
    try:
        yield
    except (http.client.HTTPException, TimeoutError, ConnectionError) as error:
        raise away(error, address) from error


def _frame(table: pa.Table, about: dict[str, Any]) -> pd.DataFrame:
    frame = table.to_pandas(types_mapper=NULLABLE.get)
    for name in frame.columns:
        if isinstance(frame[name].dtype, pd.DatetimeTZDtype):
            frame[name] = frame[name].astype(TIME)
    frame = frame.set_index("at")
    frame.attrs.update(about)
    return frame


def _warn_of_holes(about: dict[str, Any]) -> None:
    if about.get("not_kept"):
        spans = ", ".join("/".join(pair) for pair in about["not_kept"])
        warnings.warn(f"Raw readings of {about.get('tap', 'the tap')} are no longer kept for {spans}: there is a hole in what "
                      "you get. lab.history() still has the envelope.", NotKept, stacklevel=6)
