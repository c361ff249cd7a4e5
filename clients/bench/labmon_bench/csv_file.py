"""A table of text that another program goes on writing: what is new in it, told by content, never by place alone.

The place is an offset with digests of what stands before it. Where they no longer fit, the file was rotated, cut or written
anew: the rest of the old one is looked for beside it, then the file is read from its start, and lines seen before are left
out. The file is never held open, so its writer may rename it at any instant: what was read counts only if the files beside
it had the same names before and after.
"""

from __future__ import annotations

import csv
import fnmatch
import hashlib
import os
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import IO

from labmon_bench.csv_time import line_time
from labmon_bench.reading import Reading, number_of, reading_now
from labmon_bench.settings import CsvSettings
from labmon_bench.source import OddLine, SourceFault
from labmon_bench.spool import Place
from labmon_bench.store import Store

_HEAD_BYTES = 1_024
_TAIL_BYTES = 4_096
_AT_ONCE_BYTES = 256 << 10
_LOOKS = 3
"""How often a folder is looked at anew, where files were renamed while it was looked at, before it is left for the next time."""
_PACKED = {".gz", ".bz2", ".xz", ".zip", ".zst"}


@dataclass(frozen=True)
class _Point:
    """How far a file is read.

    Attributes:
        head, tail: Digests of the first and the last bytes before ``offset``.
        file_number: The system's number of the file.
        lines: Lines read before the first row; ``names``: its header.
        is_again: It is read from its start, and lines of it may have been seen.
        is_skipped: What stands there is only noted as seen (``begin = now``).
    """

    path: str
    offset: int = 0
    head: str = ""
    tail: str = ""
    lines: int = 0
    names: Sequence[str] = field(default_factory=tuple)
    file_number: int = 0
    is_again: bool = True
    is_skipped: bool = False


class CsvFile:
    """One tap's growing file.

    Args:
        store: Where places are kept.
    """

    is_awaited = False

    def __init__(self, tap: str, settings: CsvSettings, store: Store) -> None:
        self.tap, self.settings, self.store = tap, settings, store
        self.source = f"csv {tap} {settings.file}"
        state = store.place(self.source)
        self._point = None if state is None else _Point(**state)
        if self._point is not None and self._point.is_again:
            self._point = _Point(self._point.path, file_number=self._point.file_number, is_skipped=self._point.is_skipped)
        self._passed: Counter[bytes] = Counter()
        self._is_watched = False
        self._next: tuple[_Point, Counter[bytes], bool] | None = None
        self._odd: list[str] = []

    def read(self) -> tuple[list[Reading], Place | None]:
        """New rows, up to a quarter of a megabyte of lines at a time."""
        if self._odd:
            odd, self._odd = self._odd, []
            raise OddLine(f"{len(odd)} lines of {self.settings.file.name} were left out, the first: {odd[0]}")
        kept = self._is_watched, self._passed
        for turn in range(_LOOKS):
            names = self._names()
            try:
                found = self._look()
            except SourceFault:
                if self._names() == names or turn == _LOOKS - 1:
                    raise
            else:
                if self._names() == names:
                    return found
            self._is_watched, self._passed = kept
            self._next, self._odd = None, []
        return [], None

    def _look(self) -> tuple[list[Reading], Place | None]:
        """New rows, right only if no file is renamed meanwhile."""
        current = self._current()
        if self._point is None:
            return self._read_on(_Point(str(current), is_skipped=not self.settings.is_from_start))
        point = self._found_again(self._point)
        if point is not None:
            readings, place = self._read_on(point)
            if place is not None or Path(point.path) == current:
                return readings, place
            current = self._following(Path(point.path), current)
        self._passed = Counter()
        return self._read_on(_Point(str(current)))

    def kept(self) -> None:
        """Go on behind what was read."""
        if self._next is not None:
            self._point, self._passed, self._is_watched = self._next
            self._next = None

    def close(self) -> None:
        """The file is never held open."""

    def _current(self) -> Path:
        """The file that is written now: of several that fit the name's pattern, the one written last."""
        file = self.settings.file
        try:
            return max((path for path in _fitting(file) if path.is_file()), key=lambda path: (path.stat().st_mtime_ns, path.name))
        except (OSError, ValueError):
            raise SourceFault(f"{file} is not there; is its writer running, and is the path right?") from None

    def _following(self, path: Path, current: Path) -> Path:
        """The file that was begun after one that is read to its end: the writer may have begun several since."""
        if not self.settings.time_columns:
            return current
        try:
            others = [other for other in [*self._beside(path), *_fitting(self.settings.file)] if other != path]
            later = [(other.stat().st_mtime_ns, other.name, other) for other in others
                     if other.stat().st_mtime_ns > path.stat().st_mtime_ns]
        except OSError:
            return current
        return min(later)[2] if later else current

    def _found_again(self, point: _Point) -> _Point | None:
        """The point in its file, or in the file's new name; None where what was read stands nowhere."""
        path = Path(point.path)
        found = [place for place in [path, *self._beside(path)] if _stands_in(place, point)]
        same = [place for place in found if _file_number(place) == point.file_number]
        if same:  # decides where a header is all there is
            return replace(point, path=str(same[0]))
        if not point.offset:  # stands in every file
            found = [place for place in found if place == path]
        return replace(point, path=str(found[0])) if found else None

    def _names(self) -> dict[str, int]:
        """The files that rotation concerns, by name, each with the system's number."""
        file = self.settings.file
        try:
            with os.scandir(file.parent) as entries:
                return {entry.name: entry.inode() for entry in entries if entry.name.startswith(_stem(file))
                        and (file.suffix in Path(entry.name).suffixes or fnmatch.fnmatch(entry.name, file.name))}
        except OSError:
            return {}

    def _beside(self, path: Path) -> list[Path]:
        """Files that rotation may have made: ``power.csv.1``, ``power-2.csv``, ``power.1.csv``."""
        file, stem = self.settings.file, _stem(self.settings.file)
        return sorted(other for other in file.parent.glob("*") if other != path and other.name.startswith(stem)
                      and file.suffix in other.suffixes and other.suffix not in _PACKED and other.is_file())

    def _read_on(self, point: _Point) -> tuple[list[Reading], Place | None]:
        """Rows of whole lines behind a point; no place where nothing changes."""
        path = Path(point.path)
        try:
            with path.open("rb") as file:
                file.seek(point.offset)
                found = file.read(_AT_ONCE_BYTES)
                whole = found[:found.rfind(b"\n") + 1]
                head, tail = _digests(file, point.offset + len(whole))
                number = os.fstat(file.fileno()).st_ino  # of the file that was read, whatever has its name by now
        except OSError as error:
            raise SourceFault(f"{path} cannot be read ({error.strerror}); may this user read it?") from error
        is_end = len(found) < _AT_ONCE_BYTES
        if not whole and not is_end:
            raise SourceFault(f"{path} has a line of more than {_AT_ONCE_BYTES >> 10} kB; is it a text file?")
        if not whole and not point.is_again:
            self._is_watched = self._is_watched or is_end
            return [], None
        rows, after = self._rows(whole, replace(point, offset=point.offset + len(whole), head=head, tail=tail,
                                                file_number=number))
        new, counts, passed = self._new_rows(rows, point)
        readings = self._readings(new, after)
        after = replace(after, is_again=point.is_again and not is_end, is_skipped=point.is_skipped and not is_end)
        self._next = after, passed, self._is_watched or is_end
        return readings, Place(self.source, vars(after), counts)

    def _rows(self, whole: bytes, point: _Point) -> tuple[list[bytes], _Point]:
        """The lines that are rows; what stands before them goes into the point."""
        rows, lines, names = [], point.lines, point.names
        before = self.settings.skip_lines + self.settings.has_header
        for line in whole.split(b"\n")[:-1]:
            if lines < before:
                lines += 1
                if lines == before and self.settings.has_header:
                    names = [name.strip() for name in self._cells(line)]
            elif line.strip():
                rows.append(line.rstrip(b"\r"))
        return rows, replace(point, lines=lines, names=names)

    def _new_rows(self, rows: list[bytes], point: _Point) -> tuple[list[bytes], dict[bytes, int], Counter[bytes]]:
        """Rows that are new, how often each has been seen then, and how often in this pass through the file."""
        passed = Counter(self._passed)
        if not self.settings.time_columns:
            is_known_time = self._is_watched and not point.is_skipped
            if rows and not is_known_time and not point.is_skipped:
                self._odd.append(f"{len(rows)} came while nobody watched and have no time of their own; name the time column")
            return (rows if is_known_time else []), {}, passed
        digests = [hashlib.blake2b(row, digest_size=8).digest() for row in rows]
        counts = Counter(self.store.lines_seen(self.source, digests))
        new = []
        for row, digest in zip(rows, digests):
            passed[digest] += point.is_again
            if not point.is_again or passed[digest] > counts[digest]:
                counts[digest] += 1
                new.append(row)
        return ([] if point.is_skipped else new), counts, passed if point.is_again else Counter()

    def _readings(self, rows: list[bytes], point: _Point) -> list[Reading]:
        readings = []
        for row in rows:
            try:
                readings.append(self._reading(self._cells(row), point.names))
            except ValueError as error:
                self._odd.append(f"{row[:80].decode(errors='replace')!r}: {error}")
        return readings

    def _reading(self, cells: list[str], names: Sequence[str]) -> Reading:
        values = {ours: number_of(_cell(cells, theirs, names), self.settings.decimal) for ours, theirs in self.settings.columns}
        if not self.settings.time_columns:
            return reading_now(self.tap, values)
        text = " ".join(_cell(cells, column, names).strip() for column in self.settings.time_columns)
        return Reading(self.tap, line_time(text, self.settings.time_format, self.settings.zone), None, values)

    def _cells(self, line: bytes) -> list[str]:
        text = line.decode(self.settings.encoding, "replace").lstrip("\ufeff").rstrip("\r")
        if self.settings.delimiter == " ":
            return text.split()
        return next(csv.reader([text], delimiter=self.settings.delimiter), [])


def _fitting(file: Path) -> list[Path]:
    """Files that a name or a pattern means."""
    return list(file.parent.glob(file.name)) if any(sign in file.name for sign in "*?[") else [file]


def _stem(file: Path) -> str:
    """What the names of all files begin with that rotation may make."""
    return file.name.split(".")[0].split("*")[0].split("?")[0].split("[")[0]


def _cell(cells: Sequence[str], column: str, names: Sequence[str]) -> str:
    """The cell of a named or numbered column.

    Raises:
        ValueError: There is none.
    """
    if column in names:
        place = names.index(column)
    elif column.isdigit() and int(column) > 0:
        place = int(column) - 1
    else:
        raise ValueError(f"the file has no column {column!r}; it has {', '.join(names)}")
    if place >= len(cells):
        raise ValueError(f"has {len(cells)} cells, none for {column!r}")
    return cells[place]


def _digests(file: IO[bytes], offset: int) -> tuple[str, str]:
    """Of the first and the last bytes before an offset."""
    file.seek(0)
    head = file.read(min(offset, _HEAD_BYTES))
    file.seek(max(0, offset - _TAIL_BYTES))
    tail = file.read(min(offset, _TAIL_BYTES))
    return hashlib.blake2b(head, digest_size=8).hexdigest(), hashlib.blake2b(tail, digest_size=8).hexdigest()


def _file_number(path: Path) -> int:
    """The system's number of a file, which renaming keeps; 0 where there is no file."""
    try:
        return path.stat().st_ino
    except OSError:
        return 0


def _stands_in(path: Path, point: _Point) -> bool:
    """Whether a file has what was read up to the point."""
    try:
        with path.open("rb") as file:
            is_long_enough = path.stat().st_size >= point.offset
            return is_long_enough and (not point.offset or _digests(file, point.offset) == (point.head, point.tail))
    except OSError:
        return False
