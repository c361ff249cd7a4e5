import gzip
import io
import json

import pytest
from django.core.management import CommandError, call_command

from ingest.models import FileImport, TapKind, Unit
from ingest.store.read import read_readings
from labmon.audit.models import AuditEntry
from tests.factories import make_station, make_tap

pytestmark = pytest.mark.django_db

MAPPING = '[time]\ncolumn = "t"\nzone = "UTC"\n[columns]\nport1 = "a"\nport2 = "b"\n'
FILE = "t,a,b\n2031-03-04 12:00:00,1,0.001\n2031-03-04 12:00:01,1,x\n2031-03-04 12:00:02,1,0.002\n"


@pytest.fixture
def tap():
    return make_tap(make_station("bench-a"), "out", kind=TapKind.TWO_PORT, unit=Unit.MILLIWATT)


@pytest.fixture
def run(tmp_path):
    (tmp_path / "log.csv").write_text(FILE)
    (tmp_path / "log.csv.gz").write_bytes(gzip.compress(FILE.encode()))
    (tmp_path / "map.toml").write_text(MAPPING)

    def run(file="log.csv", station="bench-a", tap="out", mapping="map.toml"):
        out, err = io.StringIO(), io.StringIO()
        call_command("import_csv", str(tmp_path / file), station=station, tap=tap,
                     mapping=tmp_path / mapping if mapping else None, stdout=out, stderr=err)
        return out.getvalue(), err.getvalue()

    run.folder = tmp_path
    return run


def test_one_json_line_of_counts_and_a_bar_beside_it(tap, run):
    out, err = run()
    assert json.loads(out) == {"rows": 3, "stored": 2, "known": 0, "set_aside": 1, "lines_left_out": 1}
    assert out.count("\n") == 1
    assert "100%" in err and "3 rows" in err
    assert read_readings(tap.pk, 0, 2**62).column("port2").tolist() == [0.001, 0.002]


def test_packed_again_and_by_the_saved_mapping(tap, run):
    run()
    out, _ = run(file="log.csv.gz", mapping=None)
    assert json.loads(out) == {"rows": 3, "stored": 0, "known": 2, "set_aside": 1, "lines_left_out": 1}
    assert FileImport.objects.count() == 2


def test_it_stands_in_the_audit(tap, run):
    run()
    entry = AuditEntry.objects.get(action="read a file in")
    assert entry.subject == "tap/bench-a/out" and entry.after["stored"] == 2 and entry.after["file"] == "log.csv"


@pytest.mark.parametrize(("words", "remedy"), [
    ({"station": "bench-b"}, "There is no station bench-b"),
    ({"tap": "in"}, "bench-a/in: no such tap. bench-a has out"),
    ({"file": "none.csv"}, "none.csv cannot be opened: No such file"),
    ({"mapping": "none.toml"}, "none.toml cannot be opened: No such file"),
    ({"mapping": None}, "none is saved for tap out; give one: --mapping"),
    ({"mapping": "log.csv"}, "this is not TOML"),
    ({"mapping": "log.csv.gz"}, "is not UTF-8 text"),
])
def test_a_fault_says_what_to_do(tap, run, words, remedy):
    with pytest.raises(CommandError, match=remedy):
        run(**words)


def test_a_damaged_packed_file_keeps_what_came_before(tap, run):
    (run.folder / "cut.gz").write_bytes(gzip.compress(FILE.encode())[:-10])
    with pytest.raises(CommandError, match=r"cut.gz was not read to its end: after line \d+ the packed file is damaged"):
        run(file="cut.gz")


def test_a_header_that_lacks_a_column_names_it(tap, run):
    (run.folder / "log.csv").write_text(FILE.replace("a,b", "A,b"))
    with pytest.raises(CommandError, match='columns.port1 = "a": is not in the header line; it has t, A, b'):
        run()
