"""A file that has grown since it was read: what was read still stands where both its ends do, and only the rest is read.

Rows are known by content, never by place (docs/decisions/0040-files-by-content.md). So the rest begins with some lines that were
read before: rows of one instant are counted together, and where the lines do not reach back before the first new instant,
`ingest.files.importing` asks for the whole file.
"""

import hashlib
import io
import tempfile
from dataclasses import dataclass
from typing import BinaryIO, Final

from ingest.files.lines import GZIP_START, Table
from ingest.files.mapping import FileLayout

#: So many bytes at either end are compared, and so many are read again before what is new.
EDGE_BYTES: Final = 64 << 10
_IN_MEMORY_BYTES: Final = 32 << 20
_PIECE: Final = 1 << 20


@dataclass(frozen=True, slots=True)
class Resume:
    """How a rest's lines are numbered: ``shift`` is added behind the header; up to ``through_line`` they were read before."""

    shift: int
    through_line: int


def is_packed(raw: BinaryIO) -> bool:
    """Whether a file is gzip, by its first bytes; it stands at its start afterwards."""
    start = raw.read(2)
    raw.seek(0)
    return start == GZIP_START


def end_of_lines(raw: BinaryIO, size: int) -> int:
    """Bytes up to the last line end within ``size``; 0 where there is none."""
    place = size
    while place > 0:
        begin = max(0, place - EDGE_BYTES)
        raw.seek(begin)
        last = raw.read(place - begin).rfind(b"\n")
        if last >= 0:
            return begin + last + 1
        place = begin
    return 0


def edges_of(raw: BinaryIO, size: int) -> str:
    """Digest of the first and of the last bytes of the first ``size``."""
    digest = hashlib.blake2b(str(size).encode(), digest_size=32)
    for begin in (0, max(0, size - EDGE_BYTES)):
        raw.seek(begin)
        digest.update(raw.read(min(EDGE_BYTES, size - begin)))
    return digest.hexdigest()


def line_ends(raw: BinaryIO, begin: int, end: int) -> int:
    """Line ends between two places."""
    raw.seek(begin)
    count, left = 0, end - begin
    while left > 0 and (piece := raw.read(min(_PIECE, left))):
        count += piece.count(b"\n")
        left -= len(piece)
    return count


def start_of(raw: BinaryIO, end: int) -> BinaryIO:
    """The first ``end`` bytes as a file of their own."""
    return io.BufferedReader(_Upto(raw, end))


def rest_of(raw: BinaryIO, read_size: int, lines: int, end: int, layout: FileLayout) -> tuple[BinaryIO, Resume] | None:
    """Header, some lines that were read before, and all that is new up to ``end``; None where they cannot be told apart.

    Args:
        read_size, lines: Bytes that were read before, and the line ends within them.
    """
    encoding = layout.encoding.lower().replace("_", "-")
    if encoding.startswith(("utf-16", "utf-32", "utf16", "utf32")):
        return None
    raw.seek(0)
    head = raw.read(min(EDGE_BYTES, read_size))
    header_lines = Table(io.BytesIO(head), layout).lines_read
    parts = head.split(b"\n", header_lines)
    if len(parts) <= header_lines:
        return None
    header = b"".join(part + b"\n" for part in parts[:header_lines])
    begin = _line_start(raw, max(read_size - EDGE_BYTES, len(header)), len(header), read_size)
    before = lines - line_ends(raw, begin, read_size)
    copy = tempfile.SpooledTemporaryFile(max_size=_IN_MEMORY_BYTES)
    copy.write(header)
    raw.seek(begin)
    left = end - begin
    while left > 0 and (piece := raw.read(min(_PIECE, left))):
        copy.write(piece)
        left -= len(piece)
    copy.seek(0)
    return copy, Resume(shift=before - header_lines, through_line=lines)  # type: ignore[return-value]


def _line_start(raw: BinaryIO, place: int, header_size: int, read_size: int) -> int:
    """The first line that begins at or behind ``place``."""
    if place <= header_size:
        return header_size
    raw.seek(place - 1)
    found = raw.read(read_size - place + 1).find(b"\n")
    return place + found if found >= 0 else header_size


class _Upto(io.RawIOBase):
    """A file cut off at a place; what is written behind it meanwhile is not seen."""

    def __init__(self, raw: BinaryIO, end: int) -> None:
        super().__init__()
        self._raw, self._end, self._place = raw, end, 0

    def readable(self) -> bool:
        return True

    def seekable(self) -> bool:
        return True

    def readinto(self, into) -> int:  # type: ignore[no-untyped-def]
        self._raw.seek(self._place)
        piece = self._raw.read(min(len(into), max(self._end - self._place, 0)))
        into[:len(piece)] = piece
        self._place += len(piece)
        return len(piece)

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        self._place = {io.SEEK_SET: 0, io.SEEK_CUR: self._place, io.SEEK_END: self._end}[whence] + offset
        return self._place

    def tell(self) -> int:
        return self._place
