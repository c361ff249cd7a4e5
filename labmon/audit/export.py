"""The audit as CSV or JSON lines, plain or chained: each line then carries a digest of all lines before it."""

import csv
import io
import json
from collections.abc import Iterable, Iterator
from enum import StrEnum
from hashlib import sha256
from typing import Any, Final

from labmon.audit.models import AuditEntry

#: What the first line's digest rests on.
CHAIN_START: Final = "0" * 64
FIELDS: Final = ("id", "at", "person", "action", "subject", "before", "after", "reason")
#: A spreadsheet takes a cell that begins so for a formula.
_FORMULA: Final = ("=", "+", "-", "@", "\t", "\r")


class ExportForm(StrEnum):
    CSV = "csv"
    JSON_LINES = "jsonl"


TYPES: Final = {ExportForm.CSV: "text/csv; charset=utf-8", ExportForm.JSON_LINES: "application/jsonl"}


def entry_facts(row: AuditEntry) -> dict[str, Any]:
    """An entry as API and export name it; its time as RFC 3339, UTC, with microseconds."""
    return {"id": row.pk, "at": row.at.strftime("%Y-%m-%dT%H:%M:%S.%fZ"), "person": row.person_name, "action": row.action,
            "subject": row.subject, "before": row.before, "after": row.after, "reason": row.reason}


def chained(entries: Iterable[dict[str, Any]]) -> Iterator[dict[str, Any]]:
    """Each entry with ``chain``: SHA-256, in hexadecimal, of the chain before it and the entry's own canonical JSON.

    Canonical: as ``canonical`` writes it. Whoever changes, drops or moves a line breaks every digest behind it.
    """
    chain = CHAIN_START
    for entry in entries:
        chain = sha256((chain + canonical(entry)).encode()).hexdigest()
        yield entry | {"chain": chain}


def canonical(entry: dict[str, Any]) -> str:
    """JSON with sorted names, no blanks, text as UTF-8."""
    return json.dumps(entry, sort_keys=True, separators=(",", ":"), ensure_ascii=False)


def exported(rows: Iterable[AuditEntry], form: ExportForm, *, has_chain: bool) -> Iterator[bytes]:
    """The lines, one piece each."""
    entries: Iterable[dict[str, Any]] = map(entry_facts, rows)
    entries = chained(entries) if has_chain else entries
    if form is ExportForm.JSON_LINES:
        for entry in entries:
            yield (canonical(entry) + "\n").encode()
        return
    names = [*FIELDS, *(["chain"] if has_chain else [])]
    yield _line(names)
    for entry in entries:
        yield _line([_cell(entry[name]) for name in names])


def _cell(value: Any) -> str:
    """Before and after as canonical JSON; what a spreadsheet would run is set in quotes by an apostrophe."""
    text = "" if value is None else value if isinstance(value, str) else canonical(value)
    return f"'{text}" if text.startswith(_FORMULA) else text


def _line(cells: list[str]) -> bytes:
    out = io.StringIO()
    csv.writer(out, lineterminator="\r\n").writerow(cells)
    return out.getvalue().encode()
