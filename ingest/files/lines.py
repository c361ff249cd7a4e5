"""From a file's bytes to numbered lines of cells, whatever the bytes are."""

import csv
import gzip
import io
import zlib
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass
from typing import BinaryIO

from ingest.files.faults import FileFault
from ingest.files.mapping import FileLayout

LINE_LIMIT = 65_536
GZIP_START = b"\x1f\x8b"


@dataclass(frozen=True, slots=True)
class Line:
    """A line that is neither blank nor a comment; ``cells`` are stripped; None where the line is too long to be one."""

    number: int
    text: str
    cells: list[str] | None


def opened(raw: BinaryIO) -> BinaryIO:
    """The file's bytes, unpacked where they are gzip (told by the first two bytes, not by the name)."""
    start = raw.read(2)
    raw.seek(0)
    return gzip.GzipFile(fileobj=raw) if start == GZIP_START else raw


def first_bytes(raw: BinaryIO, count: int) -> bytes:
    """The start of the unpacked file; ``raw`` stands at its start again afterwards.

    Raises:
        FileFault: The packed file is damaged.
    """
    try:
        return opened(raw).read(count)
    except (EOFError, OSError, zlib.error) as fault:
        raise FileFault(f"the packed file is damaged or ends early ({fault}); copy the file again") from fault
    finally:
        raw.seek(0)


def text_lines(raw: BinaryIO, encoding: str) -> Iterator[tuple[int, str]]:
    """Numbered physical lines, without their ends; a byte that is no text shows as ``\\xhh``.

    Raises:
        FileFault: The packed file is damaged or ends early.
    """
    name = "utf-8-sig" if encoding.lower().replace("_", "-") in {"utf-8", "utf8"} else encoding
    text = io.TextIOWrapper(opened(raw), encoding=name, errors="backslashreplace", newline=None)
    number = 0
    try:
        while piece := text.readline(LINE_LIMIT + 1):
            number += 1
            whole = piece
            while len(piece) > LINE_LIMIT and not piece.endswith("\n"):
                piece = text.readline(LINE_LIMIT + 1)
            yield number, whole.removesuffix("\n")
    except (EOFError, OSError, zlib.error) as fault:
        raise FileFault(f"after line {number} the packed file is damaged or ends early ({fault}); "
                        "what came before is kept, copy the file again and import it again") from fault
    except UnicodeError as fault:
        raise FileFault(f"after line {number} the text is not {encoding} ({fault}); say the right file.encoding") from fault
    finally:
        with suppress(ValueError):                 # the file may be closed already
            text.detach()                          # else the wrapper would close it


def cells_of(text: str, delimiter: str) -> list[str]:
    """A line cut into cells, each stripped; a cell in quotation marks may hold the delimiter."""
    if '"' in text:
        cells = next(csv.reader([text], delimiter=delimiter, skipinitialspace=delimiter == " "), [])
        return [cell.strip() for cell in cells if cell or delimiter != " "]
    if delimiter == " ":
        return text.split()
    return [cell.strip() for cell in text.split(delimiter)]


class Table:
    """The lines of one file under a layout: the header first, then the rows; counts what it leaves out.

    ``shift`` is added to the numbers of the rows, where lines between header and rows were left out.
    """

    def __init__(self, raw: BinaryIO, layout: FileLayout, *, shift: int = 0) -> None:
        self._shift = shift
        self._lines = text_lines(raw, layout.encoding)
        self._layout = layout
        self.lines_read = 0
        self.lines_left_out = 0
        for _ in range(layout.skip_lines):
            self._next(is_left_out=True)
        self.header = self._header() if layout.has_header else []
        for _ in range(layout.skip_after_header):
            self._next(is_left_out=True)

    def rows(self) -> Iterator[Line]:
        """The lines that should be readings."""
        while (line := self._next()) is not None:
            number, text = line[0] + self._shift, line[1]
            if self._is_nothing(text):
                self.lines_left_out += 1
            elif len(text) > LINE_LIMIT:
                yield Line(number, text, None)
            else:
                yield Line(number, text, cells_of(text, self._layout.delimiter))

    def _header(self) -> list[str]:
        while (line := self._next(is_left_out=True)) is not None:
            if not self._is_nothing(line[1]):
                return cells_of(line[1][:LINE_LIMIT], self._layout.delimiter)
        return []

    def _is_nothing(self, text: str) -> bool:
        comment = self._layout.comment
        return not text.strip() or bool(comment and text.lstrip().startswith(comment))

    def _next(self, *, is_left_out: bool = False) -> tuple[int, str] | None:
        line = next(self._lines, None)
        if line is not None:
            self.lines_read += 1
            self.lines_left_out += is_left_out
        return line
