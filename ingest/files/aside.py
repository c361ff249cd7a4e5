"""Keeping lines of files that are no readings."""

import hashlib

from ingest.files.faults import RefusedRow
from ingest.models import FileImport, SetAside
from ingest.times import now_us

TEXT_KEPT = 2000
_ROWS_AT_ONCE = 1000


def set_rows_aside(record: FileImport, boot: str, rows: list[RefusedRow]) -> None:
    """Keep each line as it came, once however often and in whichever file it comes."""
    tap, arrival_us = record.tap, now_us()
    SetAside.objects.bulk_create(
        (SetAside(station_id=tap.station_id, tap=tap, boot=boot, arrival_us=arrival_us, field=row.field[:100],
                  why=_storable(row.why)[:300], do=row.do[:300], digest=_digest(tap.pk, row),
                  reading={"file": _storable(record.file_name), "line": row.line, "text": _storable(row.text)[:TEXT_KEPT]})
         for row in rows), batch_size=_ROWS_AT_ONCE, ignore_conflicts=True)


def _digest(tap_id: int, row: RefusedRow) -> bytes:
    return hashlib.blake2b(f"{tap_id}\0file\0{row.text}".encode("utf-8", "backslashreplace"), digest_size=16).digest()


def _storable(text: str) -> str:
    """The text without what PostgreSQL cannot hold: a NUL and half surrogate pairs show as their escapes."""
    return text.replace("\0", "\\x00").encode("utf-8", "backslashreplace").decode("utf-8")
