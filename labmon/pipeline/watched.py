"""A watched folder: FOLDER/STATION/TAP/ holds files that other programs write; each is read in, and again when it has grown.

Nothing is moved, renamed or deleted. A row that is held already changes nothing, so a file may be read as often as one likes
(docs/decisions/0040-files-by-content.md); what was read of which file stands on the station's import page.
"""

import hashlib
import logging
import tempfile
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO, Final

from django.utils import timezone

from ingest.files.faults import FileFault, MappingError
from ingest.files.importing import ImportBusy, import_file
from ingest.files.mapping import Mapping, mapping_from_toml
from ingest.files.saved import ask_for_import, record_import, saved_mapping
from ingest.models import FileImport, Tap
from labmon.live.publish import publish

log = logging.getLogger(__name__)

MAPPING_NAME: Final = "mapping.toml"
#: A file that has not changed for this long is whole: its last line counts even without a line end.
WHOLE_AFTER_S: Final = 60.0
_IN_MEMORY_BYTES: Final = 32 << 20
_PACKED: Final = b"\x1f\x8b"


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


@dataclass(frozen=True, slots=True)
class _Seen:
    size: int
    changed_ns: int
    is_whole: bool


class Watch:
    """Looks through a folder; files that have not changed since the last look are not opened."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._seen: dict[Path, _Seen] = {}
        self._told: dict[Path, str] = {}

    def look(self) -> list[Watched]:
        """Read in what is new or has grown; a problem is told once, until it changes."""
        found = []
        for tap, path in self._files():
            said = self._take(tap, path)
            if said is None or (said.problem and self._told.get(path) == said.problem):
                continue
            self._told[path] = said.problem
            found.append(said)
        return found

    def _files(self) -> Iterator[tuple[Tap, Path]]:
        taps = {(tap.station.name, tap.name): tap for tap in Tap.objects.select_related("station")}
        for (station, name), tap in sorted(taps.items()):
            place = self._folder / station / name
            if place.is_dir():
                for path in sorted(place.iterdir()):
                    if path.is_file() and not path.name.startswith(".") and path.name != MAPPING_NAME:
                        yield tap, path

    def _take(self, tap: Tap, path: Path) -> Watched | None:
        names = {"station": tap.station.name, "tap": tap.name, "file": path.name}
        try:
            state = path.stat()
            is_whole = time.time() - state.st_mtime > WHOLE_AFTER_S
            seen = _Seen(state.st_size, state.st_mtime_ns, is_whole)
            if self._seen.get(path) == seen:
                return None
            with _whole_lines(path, is_whole) as lines:
                record = _import(tap, path, lines)
        except (MappingError, FileFault, ImportBusy) as fault:
            return Watched(**names, problem=str(fault)[:500])
        except OSError as fault:
            return Watched(**names, problem=f"cannot be read: {fault.strerror or fault}")
        self._seen[path] = seen
        if record is None:
            return None
        return Watched(**names, stored=record.stored, known=record.known, set_aside=record.set_aside)


def _import(tap: Tap, path: Path, lines: BinaryIO) -> FileImport | None:
    """The file's record after reading it in; None where this very content was read before."""
    digest = hashlib.sha256()
    while piece := lines.read(1 << 20):
        digest.update(piece)
    size = lines.tell()
    lines.seek(0)
    earlier = FileImport.objects.filter(tap=tap, file_name=_name(path)).order_by("-pk").first()
    if not size or (earlier and earlier.sha256 == digest.hexdigest() and earlier.finished_at and not earlier.error):
        return None
    mapping = _mapping(tap, path.parent)
    record = record_import(tap, _name(path), lines)
    if earlier is not None:  # one row a file, however often it grows
        earlier.sha256, earlier.rows_total, earlier.started_at = record.sha256, record.rows_total, timezone.now()
        earlier.finished_at = None
        earlier.save(update_fields=["sha256", "rows_total", "started_at", "finished_at"])
        record.delete()
        record = earlier
    ask_for_import(record, mapping)
    import_file(record, lines, on_progress=_tell)
    _tell(record)
    log.info("watched_file_read", extra={"tap_id": tap.pk, "file": path.name, "stored": record.stored, "known": record.known})
    return record


def _name(path: Path) -> str:
    return f"watched: {path.name}"[:255]


def _mapping(tap: Tap, place: Path) -> Mapping:
    beside = place / MAPPING_NAME
    if beside.is_file():
        return mapping_from_toml(beside.read_text(encoding="utf-8"), kind=tap.kind, unit=tap.unit)
    return saved_mapping(tap)


def _whole_lines(path: Path, is_whole: bool) -> BinaryIO:
    """The file, as a copy up to the last line end while it may be written to: the line at its end waits for its rest."""
    raw = path.open("rb")
    is_packed = raw.read(2) == _PACKED
    raw.seek(0)
    if is_whole or is_packed:
        return raw
    copy, end = tempfile.SpooledTemporaryFile(max_size=_IN_MEMORY_BYTES), 0
    with raw:
        while piece := raw.read(1 << 20):
            last = piece.rfind(b"\n")
            end = copy.tell() + last + 1 if last >= 0 else end
            copy.write(piece)
    copy.truncate(end)
    copy.seek(0)
    return copy  # type: ignore[return-value]


def _tell(record: FileImport) -> None:
    publish({"kind": "import", "ids": [record.pk]})
