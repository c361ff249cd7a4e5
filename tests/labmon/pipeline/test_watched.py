"""A watched folder: new and growing files are read in, once, and stay where they are as they are."""

import gzip
import json
import os
import time

import pytest
from django.core.management import CommandError, call_command

from ingest.files import grown
from ingest.models import FileImport, SetAside, WatchedFile
from ingest.store.read import read_readings
from labmon.people.models import Role
from labmon.pipeline import watched
from labmon.pipeline.tasks import watch_folder_task
from labmon.pipeline.watched import Watch, strange_folders
from tests.factories import make_person, make_station, make_tap

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
    assert [(one.stored, one.known, one.set_aside) for one in watch.look()] == [(5, 0, 0)]
    assert held(place) == 10
    record = FileImport.objects.get()
    assert (record.rows_done, record.stored, record.known) == (10, 10, 0)
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


@pytest.fixture
def read_bytes(monkeypatch):
    """How many bytes were handed to the importing of each look; old lines reach back 2 kB only."""
    monkeypatch.setattr(grown, "EDGE_BYTES", 2048)
    sizes, true_import = [], watched.import_file

    def import_file(record, raw, **options):
        raw.seek(0, 2)
        sizes.append(raw.tell())
        raw.seek(0)
        return true_import(record, raw, **options)

    monkeypatch.setattr(watched, "import_file", import_file)
    return sizes


def test_a_grown_file_is_not_read_whole(place, tmp_path, read_bytes):
    file, watch = place / "power.csv", Watch(tmp_path)
    file.write_text("Time,A,B\n" + rows(0, 1000))
    watch.look()
    for first in range(1000, 1500, 100):
        with file.open("a") as more:
            more.write(rows(first, 100))
        assert [one.stored for one in watch.look()] == [100]
    assert held(place) == 1500
    assert read_bytes[0] > 30_000 and max(read_bytes[1:]) < 7_000


def test_a_line_that_cannot_be_read_is_told_with_its_number_in_the_whole_file(place, tmp_path, read_bytes):
    file, watch = place / "power.csv", Watch(tmp_path)
    file.write_text("Time,A,B\n" + rows(0, 1000))
    watch.look()
    with file.open("a") as more:
        more.write(rows(1000, 1) + "2031-03-04 12:16:41,broken,1\n" + rows(1002, 1))
    assert [(one.stored, one.set_aside) for one in watch.look()] == [(2, 1)]
    assert SetAside.objects.get().reading["line"] == 1003 and len(read_bytes) == 2


def test_equal_lines_on_both_sides_of_a_look_are_two_readings(place, tmp_path, read_bytes):
    """Whole-second stamps: three equal lines, of which two were read before (decision 0040: counted within the file)."""
    file, watch = place / "power.csv", Watch(tmp_path)
    line = rows(700, 1)
    file.write_text("Time,A,B\n" + rows(0, 700) + line + line)
    watch.look()
    with file.open("a") as more:
        more.write(line + rows(701, 3))
    assert [one.stored for one in watch.look()] == [4]
    assert held(place) == 706 and read_bytes[1] < 4_000


@pytest.mark.parametrize("change", ["head", "tail", "shorter", "out of order", "mapping"])
def test_in_doubt_the_whole_file_is_read_and_nothing_is_doubled(place, tmp_path, read_bytes, change):
    file, watch = place / "power.csv", Watch(tmp_path)
    file.write_text("Time,A,B\n" + rows(0, 1000))
    watch.look()
    if change == "head":
        file.write_text("Time,A,B\n" + rows(5, 1100))
    elif change == "tail":
        file.write_text("Time,A,B\n" + rows(0, 990) + rows(1200, 200))
    elif change == "shorter":
        file.write_text("Time,A,B\n" + rows(500, 300))
    elif change == "out of order":
        with file.open("a") as more:
            more.write(rows(1000, 50) + rows(2000, 1) + rows(1100, 50))
    else:
        (place / "mapping.toml").write_text(MAPPING + "\n")
    watch.look()
    if change != "mapping":  # what was read stays what it was, so a changed mapping alone reads it again and stores nothing
        assert read_bytes[-1] == file.stat().st_size
    expected = {"head": 1105, "tail": 1200, "shorter": 1000, "out of order": 1101, "mapping": 1000}[change]
    assert held(place) == expected
    assert WatchedFile.objects.get().is_in_order == (change != "out of order")
    assert watch.look() == []


def test_a_fault_goes_when_the_file_or_the_mapping_is_mended(place, tmp_path):
    file, watch = place / "a.csv", Watch(tmp_path)
    file.write_text("When,A,B\n" + rows(0, 5))
    watch.look()
    assert "Time" in WatchedFile.objects.get().problem
    (place / "mapping.toml").write_text(MAPPING.replace('"Time"', '"When"'))
    assert [one.stored for one in watch.look()] == [5]
    assert WatchedFile.objects.get().problem == ""
    file.unlink()
    assert watch.look() == [] and not WatchedFile.objects.exists() and held(place) == 5


def test_the_pages_say_what_became_of_each_file(place, tmp_path, client, settings):
    (place / "a.csv").write_text("When,A,B\n" + rows(0, 5))
    (place / "b.csv").write_text("Time,A,B\n" + rows(0, 5))
    (tmp_path / "b09" / "eom").mkdir(parents=True)
    (tmp_path / "b09" / "eom" / "x.csv").write_text("1")
    settings.WATCHED_FOLDER = tmp_path
    watch_folder_task()
    assert strange_folders(tmp_path) == ["b09/eom"]
    client.force_login(make_person(Role.MANAGER))
    page = client.get("/stations/b08/import/").content.decode()
    assert "Not read: time.column" in page and "Read to its last line: 5 stored" in page
    health = client.get("/health/").content.decode()
    assert "files of the watched folder are followed; 1 cannot be read." in health.replace("\xa0", " ")
    assert "b08/eom-in/a.csv" in health and "Nobody reads b09/eom: there is no such tap" in health
    settings.WATCHED_FOLDER = None
    watch_folder_task()
    assert "No folder is watched" in client.get("/health/").content.decode()
