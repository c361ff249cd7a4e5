"""The four forms of a stream of tables, each read back by an ordinary reader."""

import csv
import io
import json

import numpy as np
import pyarrow as pa
import pytest

from labmon.api.formats import written

ABOUT = {"tap": "bench-a/in", "as_of": None}
TIME = pa.timestamp("us", tz="UTC")
SCHEMA = pa.schema([("at", TIME), ("er_db", pa.float64()), ("is_lower_bound", pa.bool_()), ("boot", pa.string())])


def piece(first, count):
    return pa.table({"at": pa.array(np.arange(first, first + count) * 1_000_000, TIME),
                     "er_db": pa.array([row + 0.5 if row % 3 else None for row in range(first, first + count)], pa.float64()),
                     "is_lower_bound": [row % 2 == 0 for row in range(first, first + count)],
                     "boot": [f'a,"{row}' for row in range(first, first + count)]}, schema=SCHEMA)


def body(form, pieces):
    return b"".join(written(form, SCHEMA, iter(pieces), ABOUT))


PIECES = [piece(0, 0), piece(0, 2), piece(2, 0), piece(2, 3)]
WHOLE = pa.concat_tables(PIECES)


def test_json_is_strict_and_says_what_it_is():
    said = json.loads(body("json", PIECES), parse_constant=pytest.fail)
    assert {"tap", "as_of", "readings"} == said.keys() and len(said["readings"]) == 5
    assert said["readings"][1] == {"at": "1970-01-01T00:00:01.000000Z", "er_db": 1.5, "is_lower_bound": False, "boot": 'a,"1'}
    assert said["readings"][0]["er_db"] is None


def test_csv_has_one_header_and_empty_cells_for_what_is_missing():
    rows = list(csv.DictReader(io.StringIO(body("csv", PIECES).decode())))
    assert [row["boot"] for row in rows] == WHOLE["boot"].to_pylist()
    assert [row["er_db"] for row in rows] == ["", "1.5", "2.5", "", "4.5"]
    assert rows[4]["at"] == "1970-01-01T00:00:04.000000Z"


def test_parquet_holds_the_same_table():
    table = pa.parquet.read_table(io.BytesIO(body("parquet", PIECES)))
    assert table.replace_schema_metadata(None).equals(WHOLE)
    assert json.loads(table.schema.metadata[b"labmon"]) == ABOUT


def test_arrow_holds_the_same_table():
    table = pa.ipc.open_stream(body("arrow", PIECES)).read_all()
    assert table.replace_schema_metadata(None).equals(WHOLE)


@pytest.mark.parametrize("form", ["csv", "json", "parquet", "arrow"])
def test_no_readings_make_an_empty_document(form):
    empty = body(form, [piece(0, 0)])
    match form:
        case "json":
            assert json.loads(empty)["readings"] == []
        case "csv":
            assert list(csv.DictReader(io.StringIO(empty.decode()))) == []
        case "parquet":
            assert pa.parquet.read_table(io.BytesIO(empty)).num_rows == 0
        case "arrow":
            assert pa.ipc.open_stream(empty).read_all().num_rows == 0


@pytest.mark.parametrize("form", ["csv", "json", "parquet", "arrow"])
def test_a_piece_goes_out_before_the_next_is_asked_for(form):
    asked = []

    def pieces():
        for number in range(3):
            asked.append(number)
            yield piece(number * 10, 10)

    stream = written(form, SCHEMA, pieces(), ABOUT)
    while b"a," not in next(stream):
        pass
    assert len(asked) == 1
    stream.close()
