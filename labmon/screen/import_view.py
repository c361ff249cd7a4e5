"""How far the reading in of a file is, and what its page begins with, in words."""

from dataclasses import dataclass
from itertools import islice
from typing import Any

from ingest.models import FileImport
from labmon.screen.present import count_text

LINES_SHOWN = 20
LINE_WIDTH = 200


def first_lines(lines: list[str]) -> list[tuple[int, str]]:
    """Numbered lines, cut where they are long."""
    return [(number, line if len(line) <= LINE_WIDTH else line[:LINE_WIDTH] + "…")
            for number, line in enumerate(islice(lines, LINES_SHOWN), 1)]


@dataclass(frozen=True, slots=True)
class ImportView:
    """One import in words."""

    id: int
    file_name: str
    tap: str
    started: str
    sentence: str
    is_waiting_for_mapping: bool
    is_running: bool
    done: int
    total: int


def import_view(record: FileImport) -> ImportView:
    """How far an import is, or what became of it."""
    total = max(record.rows_total or 0, record.rows_done, 1)
    is_running = record.rules is not None and record.finished_at is None
    return ImportView(id=record.pk, file_name=record.file_name, tap=record.tap.name,
                      started=f"{record.started_at:%Y-%m-%d %H:%M}", sentence=_import_sentence(record, total),
                      is_waiting_for_mapping=record.rules is None and record.finished_at is None, is_running=is_running,
                      done=record.rows_done, total=total)


def _import_sentence(record: FileImport, total: int) -> str:
    counts = f"{record.stored} stored, {record.known} known, {record.set_aside} set aside"
    if record.error:
        return f"It stopped after {count_text(record.rows_done, 'row')} ({counts}): {record.error}"
    if record.rules is None:
        return "It waits for its columns to be named."
    if record.finished_at is None:
        return f"{100 * record.rows_done // total} % read: {counts}."
    return f"{count_text(record.rows_done, 'row')}: {counts}."


def rules_shown(proposed: dict[str, Any], saved: dict[str, Any] | None, header: list[str]) -> dict[str, Any]:
    """The saved mapping where the file has its columns, else the proposal."""
    if saved is None:
        return proposed
    named = [*saved["time"].get("columns", []), *(rule["column"] for rule in saved["columns"].values())]
    fits = all(source in header if isinstance(source, str) else source <= len(header) for source in named)
    return saved if fits else proposed
