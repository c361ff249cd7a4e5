"""A file that another program writes: every row once, whatever the program does with its file."""

import os
import struct
from datetime import UTC, datetime, timedelta

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from labmon_bench.csv_file import CsvFile
from labmon_bench.csv_time import line_time
from labmon_bench.settings import CsvSettings
from labmon_bench.source import OddLine, SourceFault
from labmon_bench.store import Store

from tests.clients.bench.conftest import GENEROUS

HEADER = "Time,Power A,Power B\n"
BEGIN = datetime(2031, 3, 4, tzinfo=UTC)


def row(number):
    return f"{(BEGIN + timedelta(seconds=number)).strftime('%Y-%m-%dT%H:%M:%SZ')},{number},0.5\n"


def rows(first, last):
    return "".join(map(row, range(first, last)))


def csv_settings(file, **more):
    return CsvSettings(**{"file": file, "columns": (("port1", "Power A"), ("port2", "Power B")), "delimiter": ",", "decimal": ".",
                          "encoding": "utf-8", "skip_lines": 0, "has_header": True, "time_columns": ("Time",),
                          "time_format": "iso", "zone": UTC, "is_from_start": True} | more)


class Followed:
    """A source with its store, and what came of it."""

    def __init__(self, folder, **more):
        self.folder, self.file, self.more = folder, folder / "power.csv", more
        self.store = Store(folder / "spool", GENEROUS)
        self.begin()

    def begin(self):
        self.source = CsvFile("eom-in", csv_settings(self.file, **self.more), self.store)

    def kill(self):
        """The process dies: its memory is gone, its spool stays."""
        self.store.disk.close()
        self.store = Store(self.folder / "spool", GENEROUS)
        self.begin()

    def poll(self, most=1000):
        for _ in range(most):
            readings, place = self.source.read()
            if readings or place is not None:
                self.store.keep(readings, place)
                self.source.kept()
            if place is None:
                return
        raise AssertionError("the source does not come to an end")

    def numbers(self):
        """Numbers of all rows kept, in order of keeping."""
        db = self.store.disk.db
        return [int(struct.unpack("<2d", cells)[0]) for cells, in db.execute("SELECT cells FROM reading ORDER BY form, sequence")]


@pytest.fixture
def followed(tmp_path):
    made = Followed(tmp_path)
    yield made
    made.store.close()


def test_rows_as_they_come(followed):
    followed.file.write_text(HEADER + rows(0, 3))
    followed.poll()
    with followed.file.open("a") as file:
        file.write(rows(3, 5) + row(5)[:9])
    followed.poll()
    assert followed.numbers() == [0, 1, 2, 3, 4]
    with followed.file.open("a") as file:
        file.write(row(5)[9:])
    followed.poll()
    assert followed.numbers() == [0, 1, 2, 3, 4, 5]
    part = followed.store.next_batch(10).columns[0]
    assert part.at_us[0] == int(BEGIN.timestamp()) * 10**6 and set(part.uptime_ms) == {None}


def test_rotation_by_renaming_loses_not_even_the_last_rows(followed):
    followed.file.write_text(HEADER + rows(0, 3))
    followed.poll()
    with followed.file.open("a") as file:
        file.write(rows(3, 6))
    followed.file.rename(followed.folder / "power.csv.1")
    followed.file.write_text(HEADER + rows(6, 8))
    followed.poll()
    followed.poll()
    assert followed.numbers() == list(range(8))


def test_several_rotations_while_the_client_was_away(followed):
    followed.file.write_text(HEADER + rows(0, 3))
    followed.poll()
    followed.kill()
    for turn in range(3):
        with followed.file.open("a") as file:
            file.write(rows(3 + 5 * turn, 8 + 5 * turn))
        os.utime(followed.file, (1000 + turn, 1000 + turn))
        followed.file.rename(followed.folder / f"power.csv.{9 - turn}")
        followed.file.write_text(HEADER)
    for _ in range(5):
        followed.poll()
    assert followed.numbers() == list(range(18))


def test_a_file_that_is_rotated_when_only_its_header_was_read(followed):
    """Both files begin alike; the system's number of the file tells which one it was."""
    followed.file.write_text(HEADER)
    followed.poll()
    with followed.file.open("a") as file:
        file.write(rows(0, 3))
    followed.file.rename(followed.folder / "power.csv.1")
    followed.file.write_text(HEADER + rows(3, 5))
    followed.poll()
    followed.poll()
    assert followed.numbers() == list(range(5))


def test_rotation_by_copying_and_cutting(followed):
    followed.file.write_text(HEADER + rows(0, 5))
    followed.poll()
    (followed.folder / "power.1.csv").write_text(HEADER + rows(0, 7))
    followed.file.write_text(HEADER + rows(7, 8))
    followed.poll()
    followed.poll()
    assert followed.numbers() == list(range(8))


def test_a_file_whose_old_lines_are_cut_off(followed):
    followed.file.write_text(HEADER + rows(0, 50))
    followed.poll()
    followed.file.write_text(HEADER + rows(40, 53))
    followed.poll()
    assert followed.numbers() == list(range(53))


def test_a_new_file_each_day(tmp_path):
    followed = Followed(tmp_path)
    followed.file = tmp_path / "power-*.csv"
    followed.begin()
    (tmp_path / "power-1.csv").write_text(HEADER + rows(0, 3))
    os.utime(tmp_path / "power-1.csv", (1, 1))
    followed.poll()
    with (tmp_path / "power-1.csv").open("a") as file:
        file.write(rows(3, 4))
    os.utime(tmp_path / "power-1.csv", (2, 2))
    (tmp_path / "power-2.csv").write_text(HEADER + rows(4, 6))
    followed.poll()
    assert followed.numbers() == list(range(6))
    followed.store.close()


def test_two_equal_lines_are_two_readings_and_stay_two(followed):
    followed.file.write_text(HEADER + row(1) + row(1) + row(2))
    followed.poll()
    followed.file.write_text(HEADER + row(1) + row(1) + row(2) + row(3) + row(3))
    followed.poll()
    followed.file.write_text("Time,Power A,Power B \n" + row(1) + row(1) + row(2) + row(3) + row(3) + row(3))
    followed.poll()
    assert followed.numbers() == [1, 1, 2, 3, 3, 3]


def test_begin_now_leaves_old_lines_alone_also_when_the_file_is_written_anew(tmp_path):
    followed = Followed(tmp_path, is_from_start=False)
    followed.file.write_text(HEADER + rows(0, 20_000))
    followed.store.keep(*followed.source.read())
    followed.source.kept()
    followed.kill()
    followed.poll()
    followed.file.write_text(HEADER + rows(10, 20_002))
    followed.poll()
    assert followed.numbers() == [20_000, 20_001]
    followed.store.close()


COUNTS = {"write": st.integers(1, 12_000), "rename": st.just(0), "cut": st.integers(0, 9_000), "poll": st.integers(1, 3),
          "kill": st.just(0), "half": st.integers(1, 20)}
STEPS = st.lists(st.one_of([st.tuples(st.just(name), count) for name, count in COUNTS.items()]), min_size=1, max_size=14)


@settings(max_examples=12, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(STEPS)
def test_whatever_writer_and_client_do_each_row_once(tmp_path_factory, steps):
    """Written, renamed, cut, half a line, the client killed between any two steps of its own: each row once.

    A poll may be cut short. Rows are lost to no one only if they stood in a file of that name when the client looked: so the
    writer waits for a poll to its end before it cuts, as one that rotates by size does in practice.
    """
    folder = tmp_path_factory.mktemp("csv")
    followed = Followed(folder)
    held, number, half, moved = [], 0, "", 0
    write = lambda: followed.file.write_text(HEADER + "".join(map(row, held)) + half)  # noqa: E731
    write()
    for what, count in steps:
        if what == "write":
            half = ""
            held += range(number, number + count)
            number += count
            with followed.file.open("w") as file:
                file.write(HEADER + "".join(map(row, held)))
        elif what == "half":
            with followed.file.open("w") as file:
                file.write(HEADER + "".join(map(row, held)) + row(number)[:count])
            half = row(number)[:count]
        elif what == "rename":
            followed.poll()
            moved += 1
            followed.file.rename(folder / f"power.csv.{moved}")
            held, half = [], ""
            write()
        elif what == "cut":
            followed.poll()
            held, half = held[count:], ""
            write()
        elif what == "poll":
            for _ in range(count):
                readings, place = followed.source.read()
                if place is not None:
                    followed.store.keep(readings, place)
                    followed.source.kept()
        else:
            followed.kill()
    followed.poll()
    followed.poll()
    assert sorted(followed.numbers()) == list(range(number))
    followed.store.close()


def test_lines_without_a_time_are_stamped_when_seen_and_only_while_watched(tmp_path):
    numbered = (("port1", "2"), ("port2", "3"))
    followed = Followed(tmp_path, time_columns=(), is_from_start=False, columns=numbered, has_header=False)
    followed.file.write_text(rows(0, 3))
    followed.poll()
    with followed.file.open("a") as file:
        file.write(rows(3, 5))
    followed.poll()
    assert followed.numbers() == [3, 4]
    followed.kill()
    with followed.file.open("a") as file:
        file.write(rows(5, 7))
    followed.source.read()
    followed.source.kept()
    with pytest.raises(OddLine, match="2 came while nobody watched"):
        followed.source.read()
    followed.store.close()


def test_what_is_no_row_is_left_out_and_told_once(followed):
    odd = ["1970-01-01T00:00:00Z,1,2\n", "yesterday,1,2\n", "2031-03-04T00:00:09Z,x,2\n"]
    followed.file.write_text(HEADER + row(0) + "".join(odd) + row(1))
    followed.store.keep(*followed.source.read())
    followed.source.kept()
    assert followed.numbers() == [0, 1]
    with pytest.raises(OddLine, match=r"3 lines of power.csv were left out, the first: .*before 2020"):
        followed.source.read()
    followed.poll()


def test_a_missing_file_and_a_missing_column_say_what_to_do(followed):
    with pytest.raises(SourceFault, match="is not there"):
        followed.source.read()
    followed.file.write_text("When,A\n2031-03-04T00:00:00Z,1\n")
    followed.source.read()
    followed.source.kept()
    with pytest.raises(OddLine, match="no column 'Power A'; it has When, A"):
        followed.source.read()


def test_decimal_commas_a_units_line_and_a_byte_order_mark(tmp_path):
    followed = Followed(tmp_path, delimiter=";", decimal=",", skip_lines=1, encoding="cp1252", time_columns=("Date", "Clock"),
                        time_format="%d.%m.%Y %H:%M:%S,%f", columns=(("port1", "P µW"), ("port2", "2")))
    followed.file.write_bytes("logger 7\r\nP µW;B;Date;Clock\r\n1,5;2;04.03.2031;00:00:01,250\r\n".encode("cp1252"))
    followed.poll()
    part = followed.store.next_batch(10).columns[0]
    assert part.values == [[1.5], [2.0]] and part.at_us == [int(BEGIN.timestamp()) * 10**6 + 1_250_000]
    followed.store.close()


@pytest.mark.parametrize(("text", "form", "after_us"), [
    ("2031-03-04T00:00:01.5Z", "iso", 1_500_000), ("2031-03-04 01:00:01,000001+01:00", "iso", 1_000_001),
    ("2031-03-04 00:00", "iso", 0), ("1930348800.25", "unix", 250_000), ("04.03.2031 00:00:02", "%d.%m.%Y %H:%M:%S", 2_000_000)])
def test_times_of_lines(text, form, after_us):
    """1,930,348,800 s is 2031-03-04T00:00Z (``date -u -d @1930348800``)."""
    assert line_time(text, form, UTC) == 1_930_348_800_000_000 + after_us


def test_local_time_that_happened_twice_is_refused(monkeypatch):
    """Central European clocks went back at 2031-10-26 01:00 UTC by the standing rule (last Sunday of October)."""
    import time

    monkeypatch.setenv("TZ", "CET-1CEST,M3.5.0,M10.5.0/3")
    time.tzset()
    try:
        assert line_time("2031-10-26 01:30:00", "iso", None) == line_time("2031-10-25 23:30:00", "iso", UTC)
        for text in ("2031-10-26 02:30:00", "2031-03-30 02:30:00"):
            with pytest.raises(ValueError, match="twice or never"):
                line_time(text, "iso", None)
    finally:
        monkeypatch.undo()
        time.tzset()


@pytest.mark.parametrize("last", [1, 12], ids=["only its header was read", "rows were read"])
def test_a_file_renamed_between_the_listing_and_the_look_is_read_to_its_end(followed, monkeypatch, last):
    """Found by killing the client under load: its listing was older than the rotation, and the old file's last row was lost."""
    followed.file.write_text(HEADER + rows(1, last))
    followed.poll()
    true_beside, turns = CsvFile._beside, []

    def beside(self, path):
        listed = true_beside(self, path)
        if not turns:
            turns.append(followed.file.write_text(HEADER + rows(1, last + 1)))
            followed.file.rename(followed.folder / "power.csv.1")
            followed.file.write_text(HEADER)
        return listed

    monkeypatch.setattr(CsvFile, "_beside", beside)
    followed.poll()
    followed.file.write_text(HEADER + rows(last + 1, last + 3))
    followed.poll()
    assert turns and followed.numbers() == list(range(1, last + 3))


def rotated(followed, turn, old, new):
    """The writer ends its file with some rows and begins another under its name."""
    with followed.file.open("a") as file:
        file.write(old)
    followed.file.rename(followed.folder / f"power.csv.{turn}")
    followed.file.write_text(HEADER + new)


def once_behind(monkeypatch, name, when, then):
    """Something that happens just behind the first call of a method that fits."""
    true, done = getattr(CsvFile, name), []

    def method(self, *words):
        found = true(self, *words)
        if not done and when(*words):
            done.append(then())
        return found

    monkeypatch.setattr(CsvFile, name, method)
    return done


def test_a_file_renamed_between_the_look_and_the_reading(followed, monkeypatch):
    """Only its header was read, so the new file goes on behind the place as well as the old one does."""
    followed.file.write_text(HEADER)
    followed.poll()
    done = once_behind(monkeypatch, "_found_again", lambda point: True, lambda: rotated(followed, 1, rows(0, 3), rows(3, 5)))
    followed.poll()
    followed.poll()
    assert done and followed.numbers() == list(range(5))


def test_a_file_renamed_while_its_forerunner_is_left(followed, monkeypatch):
    """Two rotations: the second falls into the search for what follows the first file."""
    followed.file.write_text(HEADER + rows(0, 3))
    followed.poll()
    rotated(followed, 1, rows(3, 5), rows(5, 8))
    followed.store.keep(*followed.source.read())
    followed.source.kept()
    done = once_behind(monkeypatch, "_beside", lambda path: path.name == "power.csv.1",
                       lambda: rotated(followed, 2, rows(8, 9), rows(9, 11)))
    for _ in range(3):
        followed.poll()
    assert done and sorted(followed.numbers()) == list(range(11))


def test_an_empty_file_that_was_seen_and_is_rotated_full(followed):
    """A writer opens its file before it writes the header."""
    followed.file.write_text("")
    followed.poll()
    followed.kill()
    rotated(followed, 1, HEADER + rows(0, 3), rows(3, 5))
    for _ in range(3):
        followed.poll()
    assert followed.numbers() == list(range(5))


def test_a_folder_that_never_stands_still_is_left_for_the_next_time(followed, monkeypatch):
    followed.file.write_text(HEADER + rows(0, 3))
    turns = iter(range(100))
    true_current = CsvFile._current

    def current(self):
        (followed.folder / f"power.csv.old{next(turns)}").write_text("")
        return true_current(self)

    with monkeypatch.context() as patch:
        patch.setattr(CsvFile, "_current", current)
        assert followed.source.read() == ([], None)
        followed.source.kept()
    assert next(turns) == 3
    followed.poll()
    assert followed.numbers() == [0, 1, 2]
