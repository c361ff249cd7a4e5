"""A watched folder: new and growing files are read in, once, and stay where they are as they are."""

import gzip
import json
import os
import time

import pytest
from django.core.management import CommandError, call_command

from ingest.models import FileImport
from ingest.store.read import read_readings
from labmon.pipeline.watched import Watch
from tests.factories import make_station, make_tap

pytestmark = pytest.mark.django_db
MAPPING = '[time]\ncolumn = "Time"\nzone = "UTC"\n\n[columns]\nport1 = "A"\nport2 = "B"\n'


def rows(first: int, count: int) -> str:
    return "".join(f"2031-03-04 12:{place // 60:02d}:{place % 60:02d},{1e-3 + place * 1e-9},1.1e-6\n"
                   for place in range(first, first + count))


@pytest.fixture
def place(tmp_path):
    """The folder of one tap, with its mapping beside."""
    make_tap(make_station("b08"), "eom-in")
    made = tmp_path / "b08" / "eom-in"
    made.mkdir(parents=True)
    (made / "mapping.toml").write_text(MAPPING)
    return made


def held(place) -> int:
    return len(read_readings(FileImport.objects.first().tap_id, -(2**62), 2**62))


def test_a_growing_file_is_followed_line_by_line_and_left_as_it_is(place, tmp_path):
    file, watch = place / "power.csv", Watch(tmp_path)
    file.write_text("Time,A,B\n" + rows(0, 5) + "2031-03-04 12:00:05,0.00")
    assert [(one.stored, one.known, one.set_aside) for one in watch.look()] == [(5, 0, 0)]
    assert watch.look() == []
    with file.open("a") as more:
        more.write("1,1.1e-6\n" + rows(6, 4))
    assert [(one.stored, one.known, one.set_aside) for one in watch.look()] == [(5, 5, 0)]
    assert held(place) == 10
    assert FileImport.objects.count() == 1
    assert file.read_text().count("\n") == 11 and sorted(os.listdir(place)) == ["mapping.toml", "power.csv"]


def test_another_watch_finds_nothing_new(place, tmp_path):
    (place / "power.csv").write_text("Time,A,B\n" + rows(0, 5))
    Watch(tmp_path).look()
    assert Watch(tmp_path).look() == []
    assert held(place) == 5


def test_the_last_line_of_a_file_at_rest_counts_without_line_end(place, tmp_path):
    file = place / "power.csv"
    file.write_text("Time,A,B\n" + rows(0, 5).rstrip("\n"))
    long_ago = time.time() - 3600
    os.utime(file, (long_ago, long_ago))
    assert [one.stored for one in Watch(tmp_path).look()] == [5]


def test_packed_files_are_read(place, tmp_path):
    (place / "power.csv.gz").write_bytes(gzip.compress(("Time,A,B\n" + rows(0, 5)).encode()))
    assert [one.stored for one in Watch(tmp_path).look()] == [5]


def test_a_problem_is_told_once_and_the_other_files_go_on(place, tmp_path):
    (place / "a.csv").write_text("When,A,B\n" + rows(0, 5))
    (place / "b.csv").write_text("Time,A,B\n" + rows(0, 5))
    watch = Watch(tmp_path)
    bad, good = watch.look()
    assert (bad.file, good.file, good.stored) == ("a.csv", "b.csv", 5)
    assert "Time" in bad.problem
    assert watch.look() == []


def test_without_a_mapping_it_says_what_to_do(place, tmp_path):
    (place / "mapping.toml").unlink()
    (place / "power.csv").write_text("Time,A,B\n" + rows(0, 5))
    (said,) = Watch(tmp_path).look()
    assert "none is saved for tap eom-in" in said.problem


def test_the_command_tells_each_file_in_one_line(place, tmp_path, capsys):
    (place / "power.csv").write_text("Time,A,B\n" + rows(0, 5))
    call_command("watch_folder", folder=tmp_path, once=True)
    assert json.loads(capsys.readouterr().out) == {
        "station": "b08", "tap": "eom-in", "file": "power.csv", "stored": 5, "known": 0, "set_aside": 0, "problem": ""}
    with pytest.raises(CommandError, match="no folder to watch"):
        call_command("watch_folder", folder=tmp_path / "nowhere", once=True)
