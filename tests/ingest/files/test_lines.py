import gzip
import io

import pytest

from ingest.files.faults import FileFault
from ingest.files.lines import LINE_LIMIT, Table, cells_of, first_bytes, text_lines
from ingest.files.mapping import FileLayout


def lines(content: bytes, encoding: str = "utf-8") -> list[tuple[int, str]]:
    return list(text_lines(io.BytesIO(content), encoding))


@pytest.mark.parametrize(("text", "delimiter", "cells"), [
    ("a, b ,c", ",", ["a", "b", "c"]), ("a,,", ",", ["a", "", ""]), ('"a,b",c', ",", ["a,b", "c"]), ('"a,b', ",", ["a,b"]),
    (' a  b\tc ', " ", ["a", "b", "c"]), ('"a b"  c', " ", ["a b", "c"]), ("a\t\tb", "\t", ["a", "", "b"]),
    ('a"b,c', ",", ['a"b', "c"])])
def test_cells(text, delimiter, cells):
    assert cells_of(text, delimiter) == cells


def test_line_ends_marks_and_bad_bytes():
    assert lines(b"\xef\xbb\xbfa\r\nb\rc\n\nd") == [(1, "a"), (2, "b"), (3, "c"), (4, ""), (5, "d")]
    assert lines(b"\xb0C;1\n") == [(1, "\\xb0C;1")]


def test_an_overlong_line_keeps_the_count():
    found = lines(b"a\n" + b"x" * (3 * LINE_LIMIT) + b"\nb\n")
    assert [number for number, _ in found] == [1, 2, 3] and len(found[1][1]) == LINE_LIMIT + 1 and found[2][1] == "b"


def test_the_file_is_left_open_and_first_bytes_puts_it_back():
    raw = io.BytesIO(gzip.compress(b"hello"))
    assert first_bytes(raw, 3) == b"hel" and raw.tell() == 0
    list(text_lines(raw, "utf-8"))
    assert not raw.closed
    with pytest.raises(FileFault, match="damaged or ends early"):
        first_bytes(io.BytesIO(b"\x1f\x8bnope"), 3)


def test_a_table_counts_what_it_leaves_out():
    table = Table(io.BytesIO(b"x\n# c\na;b\nunits\n1;2\n\n#\n3;4\n"),
                  FileLayout(delimiter=";", skip_lines=1, skip_after_header=1, comment="#"))
    assert table.header == ["a", "b"]
    assert [(line.number, line.cells) for line in table.rows()] == [(5, ["1", "2"]), (8, ["3", "4"])]
    assert (table.lines_read, table.lines_left_out) == (8, 6)
