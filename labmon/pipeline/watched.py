"""A watched folder: FOLDER/STATION/TAP/ holds files that other programs write; each is read in, and on where it has grown.

Nothing is moved, renamed or deleted. A row that is held already changes nothing, so a file may be read as often as one likes
(docs/decisions/0040-files-by-content.md); what was read of which file, and what is wrong with it, stands on the station's
import page. How far each file was read is kept in the database, so that any process may look next.
"""

import hashlib
import json
import logging
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO, Final

from django.db import transaction
from django.utils import timezone

from ingest.files.faults import FileFault, MappingError
from ingest.files.grown import edges_of, end_of_lines, is_packed, line_ends, rest_of, start_of
from ingest.files.importing import ImportBusy, Order, ReadWhole, import_file
from ingest.files.mapping import Mapping, mapping_from_toml
from ingest.files.saved import ask_for_import, record_import, saved_mapping
from ingest.models import ColumnMapping, FileImport, Tap, WatchedFile
from labmon.live.publish import publish

log = logging.getLogger(__name__)

MAPPING_NAME: Final = "mapping.toml"
#: A file that has not changed for this long is whole: its last line counts even without a line end.
WHOLE_AFTER_S: Final = 60.0


@dataclass(frozen=True, slots=True)
class Watched:
    """What became of one file in one look: ``problem`` says what to do where it could not be read."""

    station: str
    tap: str
    file: str
    stored: int = 0
    known: int = 0
    set_aside: int = 0
    problem: str = ""


class Watch:
    """Looks through a folder; files that have not changed since the last look are not opened."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder

    def look(self) -> list[Watched]:
        """Read in what is new or has grown; a problem is told once, until it changes. What has gone is forgotten."""
        kept = {(one.tap_id, one.name): one for one in WatchedFile.objects.select_related("record")}
        rules_of = ColumnMapping.objects.values_list("tap_id", "rules")
        saved = {tap_id: json.dumps(rules, sort_keys=True) for tap_id, rules in rules_of}
        found = []
        for tap, path in self._files():
            row = kept.pop((tap.pk, path.name[:255]), None) or WatchedFile(tap=tap, name=path.name[:255])
            if (said := _take(row, tap, path, saved.get(tap.pk, ""))) is not None:
                found.append(said)
        WatchedFile.objects.filter(pk__in=[one.pk for one in kept.values()]).delete()
        return found

    def _files(self) -> Iterator[tuple[Tap, Path]]:
        taps = {(tap.station.name, tap.name): tap for tap in Tap.objects.select_related("station")}
        for (station, name), tap in sorted(taps.items()):
            place = self._folder / station / name
            if place.is_dir():
                for path in sorted(place.iterdir()):
                    if path.is_file() and not path.name.startswith(".") and path.name != MAPPING_NAME:
                        yield tap, path


def strange_folders(folder: Path) -> list[str]:
    """Folders in which files wait that nobody reads, for there is no such tap: ``STATION/TAP``."""
    taps = {f"{station}/{tap}" for station, tap in Tap.objects.values_list("station__name", "name")}
    places = [place for station in sorted(folder.iterdir()) if station.is_dir() for place in sorted(station.iterdir())]
    named = [f"{place.parent.name}/{place.name}" for place in places if place.is_dir() and any(place.iterdir())]
    return [name for name in named if name not in taps]


def _take(row: WatchedFile, tap: Tap, path: Path, saved_mark: str) -> Watched | None:
    """One file's turn; None where nothing is new."""
    names = {"station": tap.station.name, "tap": tap.name, "file": path.name}
    try:
        state = path.stat()
        is_whole = time.time() - state.st_mtime > WHOLE_AFTER_S
        mark = _mapping_mark(path.parent, saved_mark)
        looked = (state.st_size, state.st_mtime_ns, is_whole, mark)
        if row.pk and looked == (row.looked_size, row.changed_ns, row.is_whole, row.mapping_mark):
            return None
        before = row.problem
        with path.open("rb") as raw:
            said = _read(row, tap, path, raw, state.st_size, is_whole, is_same_mapping=mark == row.mapping_mark)
    except ImportBusy:
        return None  # the next look finds it as it is
    except (MappingError, FileFault) as fault:
        return _with_problem(row, looked, before, names, str(fault))
    except OSError as fault:
        return _with_problem(row, (0, 0, False, ""), row.problem, names, f"cannot be read: {fault.strerror or fault}")
    row.looked_size, row.changed_ns, row.is_whole, row.mapping_mark = looked
    row.problem = ""
    row.save()
    if before:
        _tell_of_files()
    return None if said is None else Watched(**names, stored=said[0], known=said[1], set_aside=said[2])


def _with_problem(row: WatchedFile, looked: tuple[int, int, bool, str], before: str, names: dict[str, str], problem: str,
                  ) -> Watched | None:
    row.looked_size, row.changed_ns, row.is_whole, row.mapping_mark = looked
    row.problem = problem[:500]
    row.save()
    if row.problem == before:
        return None
    _tell_of_files()
    return Watched(**names, problem=row.problem)


def _read(row: WatchedFile, tap: Tap, path: Path, raw: BinaryIO, size: int, is_whole: bool, *,
          is_same_mapping: bool) -> tuple[int, int, int] | None:
    """Read in what is new; (stored, known, set aside) of this look, None where nothing was."""
    packed = is_packed(raw)
    end = size if is_whole or packed else end_of_lines(raw, size)
    edges = edges_of(raw, end)
    if not end or (is_same_mapping and row.edges == edges and row.read_size == end and not row.problem):
        return None
    mapping = _mapping(tap, path.parent)
    counts = None
    if is_same_mapping and not packed:
        counts = _read_on(row, tap, raw, end, mapping)
    if counts is None:
        counts = _read_whole(row, tap, path, raw, end, mapping)
    row.edges, row.read_size = edges, end
    log.info("watched_file_read", extra={"tap_id": tap.pk, "file": path.name, "stored": counts[0], "known": counts[1]})
    return counts


def _read_on(row: WatchedFile, tap: Tap, raw: BinaryIO, end: int, mapping: Mapping) -> tuple[int, int, int] | None:
    """Only what was added since; None where the whole file must be read."""
    record = row.record
    if record is None or not row.edges or not row.is_in_order or end <= row.read_size:
        return None
    if edges_of(raw, row.read_size) != row.edges:
        return None
    rest = rest_of(raw, row.read_size, row.lines, end, mapping.layout)
    if rest is None:
        return None
    record.tap = tap
    before = record.stored, record.known, record.set_aside
    order = Order()
    try:
        with rest[0] as lines:
            import_file(record, lines, on_progress=_tell, resume=rest[1], order=order)
    except ReadWhole:
        return None
    row.lines += line_ends(raw, row.read_size, end)
    row.last_at_us = order.last_at_us
    _tell(record)
    return record.stored - before[0], record.known - before[1], record.set_aside - before[2]


def _read_whole(row: WatchedFile, tap: Tap, path: Path, raw: BinaryIO, end: int, mapping: Mapping) -> tuple[int, int, int]:
    lines, order = start_of(raw, end), Order()
    record = _record_for(row, tap, path, lines)
    ask_for_import(record, mapping)
    import_file(record, lines, on_progress=_tell, order=order)
    row.record, row.is_in_order, row.last_at_us = record, order.is_kept, order.last_at_us
    row.lines = line_ends(raw, 0, end)
    _tell(record)
    return record.stored, record.known, record.set_aside


@transaction.atomic
def _record_for(row: WatchedFile, tap: Tap, path: Path, lines: BinaryIO) -> FileImport:
    """One record a file, however often it grows."""
    name = f"watched: {path.name}"[:255]
    earlier = row.record or FileImport.objects.filter(tap=tap, file_name=name).order_by("-pk").first()
    record = record_import(tap, name, lines)
    if earlier is None:
        return record
    earlier.tap = tap
    earlier.sha256, earlier.rows_total, earlier.started_at = record.sha256, record.rows_total, timezone.now()
    earlier.finished_at = None
    earlier.save(update_fields=["sha256", "rows_total", "started_at", "finished_at"])
    record.delete()
    return earlier


def _mapping_mark(place: Path, saved_mark: str) -> str:
    """Which state of the mapping holds; the same as long as nobody changes it."""
    beside = place / MAPPING_NAME
    text = beside.read_bytes() if beside.is_file() else b"saved"
    return hashlib.blake2b(text if beside.is_file() else text + saved_mark.encode(), digest_size=16).hexdigest()


def _mapping(tap: Tap, place: Path) -> Mapping:
    beside = place / MAPPING_NAME
    if beside.is_file():
        return mapping_from_toml(beside.read_text(encoding="utf-8"), kind=tap.kind, unit=tap.unit)
    return saved_mapping(tap)


def _tell(record: FileImport) -> None:
    publish({"kind": "import", "ids": [record.pk]})


def _tell_of_files() -> None:
    publish({"kind": "import", "ids": []})
