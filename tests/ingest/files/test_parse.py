import gzip
import io

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.files.faults import FileFault, MappingError
from ingest.files.lines import LINE_LIMIT
from ingest.files.mapping import mapping_from_toml
from ingest.files.parse import FileReader
from tests.ingest.files.test_mapping import TWO_PORT

FILE = """Logger 7
serial;12
;;;;
Date;Time;Power A;Power B;T
d;h;mW;uW;K
# first light
28.02.2025;14:41:28,50;1,25;0,5;294,15

28.02.2025;14:41:29,50;1,26;-0,5;n/a
28.02.2025;14:41:30,50;-99.99;0,5;294,15
28.02.2025;14:41:31,50;1.26;0,5;294,15
28.02.2025;14:41:32,50;1,27
30.02.2025;14:41:33,50;1,27;0,5;294,15
26.10.2025;02:30:00,00;1,27;0,5;294,15
30.03.2025;02:30:00,00;1,27;0,5;294,15
28.02.2025;"14:41:34,50";"1,28";0,5;294,15
"""


def reader(content: bytes | str, mapping: str = TWO_PORT) -> FileReader:
    content = content.encode("cp1252") if isinstance(content, str) else content
    return FileReader(io.BytesIO(content), mapping_from_toml(mapping, kind="two-port", unit="mW"), kind="two-port", unit="mW")


def read(content: bytes | str, mapping: str = TWO_PORT):
    return next(reader(content, mapping).parts())


def test_a_logger_file_with_all_its_oddities():
    rows = read(FILE)
    assert rows.line.tolist() == [7, 9, 14, 16]
    np.testing.assert_allclose(rows.columns["port1"], [1.25, 1.26, 1.27, 1.28], rtol=1e-15)
    np.testing.assert_allclose(rows.columns["port2"], [1e-3, -1e-3, 1e-3, 1e-3], rtol=1e-12)   # factor 2, from uW to mW
    np.testing.assert_allclose(rows.columns["temperature_c"], [21.0, np.nan, 21.0, 21.0], atol=1e-9)
    assert rows.at_us[0] == 1_740_750_088_500_000                                              # 13:41:28.5 UTC
    assert [(row.line, row.field, row.why) for row in rows.refused] == [
        (10, "port1", "has no value"),
        (11, "port1", '"1.26" is not a number'),
        (12, "port2", "the line has too few cells"),
        (13, "time", '"30.02.2025 14:41:33,50" is not a time of the form %d.%m.%Y %H:%M:%S,%f'),
        (15, "time", '"30.03.2025 02:30:00,00" never happened in Europe/Berlin: the clocks were turned forward'),
    ]
    assert all(row.do for row in rows.refused) and rows.refused[1].text.endswith(";1.26;0,5;294,15")


def test_every_line_is_counted():
    file = reader(FILE)
    rows = sum(len(part) + len(part.refused) for part in file.parts())
    assert rows + file.lines_left_out == file.lines_read == len(FILE.splitlines())


@pytest.mark.parametrize("size", [1, 2, 3, 100])
def test_the_size_of_a_part_changes_nothing(size):
    whole, parts = read(FILE), list(reader(FILE).parts(size))
    assert np.concatenate([part.line for part in parts]).tolist() == whole.line.tolist()
    assert [row for part in parts for row in part.refused] == whole.refused


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "cp1252"])
@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("pack", [bytes, gzip.compress])
def test_encodings_line_ends_and_packing(encoding, end, pack):
    mapping = TWO_PORT.replace('"cp1252"', f'"{encoding.removesuffix("-sig")}"').replace('"T"', '"T (°C)"')
    content = FILE.replace(";T\n", ";T (°C)\n").replace("\n", end).encode(encoding)
    assert read(pack(content), mapping).line.tolist() == [7, 9, 14, 16]


def test_a_file_that_was_cut_keeps_what_came_before():
    noise = np.random.default_rng(1).random(2000)      # hardly compressible, so that the cut lies in the rows
    packed = gzip.compress((FILE + "".join(f"28.02.2025;15:00:00,00;{x};0,5;1\n".replace(".", ",").replace("28,02,", "28.02.")
                                           for x in noise)).encode())
    file = reader(packed[:len(packed) // 2])
    with pytest.raises(FileFault, match="damaged or ends early"):
        list(file.parts(10))
    assert file.lines_read > 100


def test_a_header_without_the_column_says_what_it_has():
    with pytest.raises(MappingError, match=r'columns.port1 = "Power A": is not in the header line; it has Date, Time, Power C'):
        reader(FILE.replace("Power A", "Power C"))


def test_a_column_that_stands_twice_needs_its_number():
    with pytest.raises(MappingError, match="stands 2 times in the header line; give the column's number"):
        reader(FILE.replace("Power B", "Power A"))


def test_an_overlong_line_is_one_refused_row():
    content = FILE + "x" * (3 * LINE_LIMIT) + "\n28.02.2025;14:41:40,50;1,25;0,5;294,15\n"
    rows = read(content)
    assert rows.line[-1] == 18
    assert rows.refused[-1].field == "line" and "longer than" in rows.refused[-1].why


PLAIN = """
[file]
header = false
missing = ["-"]
comment = "#"
[time]
column = 1
format = "seconds since"
since = 2025-01-01T00:00:00Z
[columns]
port1 = 2
port2 = 3
"""


@pytest.mark.parametrize("text", ["nan", "inf", "1e999", "0x10", "1_000", "１", "1.2.3", "1,2", "--1", ".", "e5"])
def test_what_is_no_number_never_becomes_one(text):
    rows = read(f'1,"{text}",2\n'.encode(), PLAIN)
    assert len(rows) == 0 and len(rows.refused) == 1


def test_only_the_persons_own_markers_are_missing_values():
    rows = read("1,-,2\n2,NA,2\n3,-99.99,2\n", PLAIN)
    assert [(row.line, row.why) for row in rows.refused] == [(1, "has no value"), (2, '"NA" is not a number')]
    assert rows.columns["port1"].tolist() == [-99.99]


oddities = ["1", "-2.5", "1e3", "", "-", "#", '"', "'", "x", "1e400", "nan", "\x00", "é", "2025-01-01 00:00"]
cells = st.sampled_from(oddities) | st.text(max_size=5)
rows_of_cells = st.lists(st.lists(cells, max_size=4).map(",".join), max_size=8).map("\n".join)


@settings(max_examples=200, deadline=None)
@given(st.one_of(st.binary(max_size=200), rows_of_cells.map(lambda text: text.encode("utf-8", "surrogatepass"))),
       st.sampled_from([PLAIN, PLAIN.replace("[file]", '[file]\ndelimiter = "blanks"'),
                        PLAIN.replace("[file]", '[file]\nencoding = "utf-16"\nskip_lines = 1')]))
def test_any_bytes_are_readings_or_refused_lines(content, mapping):
    try:
        file = reader(content, mapping)
        parts = list(file.parts(3))
    except FileFault:
        return
    rows = sum(len(part) + len(part.refused) for part in parts)
    assert rows + file.lines_left_out == file.lines_read
    for part in parts:
        assert all(np.all(np.isfinite(part.columns[name])) for name in ("port1", "port2"))
        assert all(row.field and row.why and row.do for row in part.refused)
