"""A file that has grown: only its rest is read, and the result is that of the whole file."""

import io

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.files import grown
from ingest.files.grown import edges_of, end_of_lines, is_packed, line_ends, rest_of, start_of
from ingest.files.lines import Table
from ingest.files.mapping import FileLayout

TEXT = "# made by a logger\nTime,A,B\n" + "".join(f"{number},{number * 2},{number * 3}\n" for number in range(1000))
LAYOUT = FileLayout(skip_lines=1)


@pytest.fixture(autouse=True)
def _short_edges(monkeypatch):
    monkeypatch.setattr(grown, "EDGE_BYTES", 200)


def rows_of(raw, layout, shift=0):
    return [(line.number, line.text) for line in Table(raw, layout, shift=shift).rows()]


@pytest.mark.parametrize("cut", [300, 500, 5000, 9000])
def test_the_rest_has_header_some_old_lines_and_all_new_ones_with_their_numbers(cut):
    raw = io.BytesIO(TEXT.encode())
    read = end_of_lines(raw, cut)
    rest, resume = rest_of(raw, read, line_ends(raw, 0, read), len(TEXT), LAYOUT)
    with rest:
        size = len(rest.read())
        rest.seek(0)
        found, whole = rows_of(rest, LAYOUT, resume.shift), rows_of(io.BytesIO(TEXT.encode()), LAYOUT)
    assert found == whole[-len(found):]
    old = [number for number, _ in found if number <= resume.through_line]
    assert old and resume.through_line == TEXT[:read].count("\n")
    assert size < len(TEXT) - read + 400


@given(st.binary(max_size=900), st.integers(0, 900))
def test_the_last_line_end_is_where_it_is(content, size):
    size = min(size, len(content))
    assert end_of_lines(io.BytesIO(content), size) == content[:size].rfind(b"\n") + 1


@given(st.binary(min_size=1, max_size=900), st.integers(0, 899), st.integers(1, 255))
def test_a_change_at_an_end_is_seen_and_growth_is_none(content, place, by):
    size = len(content)
    before = edges_of(io.BytesIO(content), size)
    assert edges_of(io.BytesIO(content + b"more"), size) == before
    place = place % size
    if place < 200 or place >= size - 200:
        changed = content[:place] + bytes([(content[place] + by) % 256]) + content[place + 1:]
        assert edges_of(io.BytesIO(changed), size) != before


def test_a_file_cut_off_reads_as_such():
    raw = start_of(io.BytesIO(b"one\ntwo\nthree"), 8)
    assert raw.read() == b"one\ntwo\n" and raw.seek(4) == 4 and raw.readline() == b"two\n" and raw.seek(0, 2) == 8
    assert not is_packed(raw)


def test_what_is_not_cut_at_bytes_is_read_whole():
    raw = io.BytesIO(TEXT.encode("utf-16"))
    assert rest_of(raw, 4000, 20, 8000, FileLayout(encoding="utf-16")) is None
    assert rest_of(io.BytesIO(b"#" * 900 + b"\n1,2\n"), 905, 2, 905, LAYOUT) is None
