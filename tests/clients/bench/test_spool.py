"""What is kept survives, what is dropped is written down, and a damaged file is put aside."""

import json
import sqlite3
import subprocess
import sys

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from labmon_bench.reading import Reading
from labmon_bench.settings import SettingsFault
from labmon_bench.spool import Boot, Place, Spool
from labmon_bench.store import Store

from tests.clients.bench.conftest import GENEROUS, ROOT, readings

BOOT = Boot("b1", "id 1")


def numbered(count, first=0, **more):
    return list(enumerate(readings(count, first, **more), first))


def everything(spool):
    """All waiting sequences in the order of sending, removed as they come."""
    found = []
    while (batch := spool.next_columns(7, (), {})) is not None:
        for part in batch[1]:
            found += part.sequence
            spool.remove(part.form, [(part.sequence[0], part.sequence[-1])])
    return found


def test_what_comes_out_is_what_went_in(tmp_path):
    spool = Spool(str(tmp_path / "s"), GENEROUS)
    reading = Reading("eom-in", 5, 7, {"port1": 0.1, "port2": None}, {"client_waiting": 3})
    spool.add(BOOT, [(4, reading)])
    spool.close()
    boot, (part,), has_more = Spool(str(tmp_path / "s"), GENEROUS).next_columns(10, (), {})
    assert boot == BOOT and not has_more
    assert (part.tap, part.names, part.sequence, part.at_us, part.uptime_ms) == ("eom-in", ("port1", "port2"), [4], [5], [7])
    assert part.values == [[0.1], [None]] and json.loads(part.more[0]) == {"client_waiting": 3}


def test_the_oldest_go_first_across_boots(tmp_path):
    spool = Spool(str(tmp_path / "s"), GENEROUS)
    spool.add(BOOT, numbered(20))
    spool.add(Boot("b2", "id 1"), numbered(10))
    assert everything(spool) == [*range(20), *range(10)] and spool.waiting == 0


@settings(max_examples=30, deadline=None)
@given(st.lists(st.tuples(st.integers(1, 60), st.integers(0, 40)), min_size=1, max_size=40))
def test_what_was_kept_is_waiting_sent_or_in_a_gap(steps):
    """The bound is held, only the oldest are dropped, and the gaps name exactly what is missing."""
    limit = 48 * 1024
    spool = Spool(":memory:", limit)
    made, sent = 0, set()
    for count, take in steps:
        spool.add(BOOT, numbered(40 * count, made))
        made += 40 * count
        if take and (batch := spool.next_columns(take, (), {})) is not None:
            part = batch[1][0]
            spool.remove(part.form, [(part.sequence[0], part.sequence[-1])])
            sent |= set(part.sequence)
    gone = {number for gap in spool.gaps(10_000) for number in range(gap.first, gap.last + 1)}
    assert spool.used_bytes() <= limit + 60 * 40 * 70  # what one keeping brings
    assert sum(gap.count for gap in spool.gaps(10_000)) == len(gone) == spool.dropped
    waiting = everything(spool)
    assert sorted([*waiting, *sent, *gone]) == list(range(made))
    assert not waiting or not gone or max(gone) < min(waiting)


def test_a_gap_says_what_when_and_why(tmp_path):
    spool = Spool(str(tmp_path / "s"), 60_000)
    for start in range(0, 3000, 100):
        spool.add(BOOT, numbered(100, start))
    gap = spool.gaps(1000)[-1]
    assert (gap.boot, gap.tap, gap.first) == ("b1", "eom-in", 0) and gap.first_at_us == readings(1)[0].at_us
    assert "bound" in gap.why and spool.dropped > 0 and spool.waiting + spool.dropped == 3000


def test_a_refused_write_leaves_nothing_half_done(tmp_path):
    spool = Spool(str(tmp_path / "s"), GENEROUS)
    spool.add(BOOT, numbered(5))
    spool.db.execute(f"PRAGMA max_page_count = {spool.db.execute('PRAGMA page_count').fetchone()[0]}")
    with pytest.raises(sqlite3.OperationalError, match="full"):
        spool.add(BOOT, numbered(5000, 5), Place("file", {"offset": 9}, {}))
    assert spool.waiting == 5 and spool.place("file") is None and everything(spool) == list(range(5))


def test_a_second_client_on_the_same_spool_is_told_so(tmp_path):
    store = Store(tmp_path / "s", GENEROUS)
    with pytest.raises(SettingsFault, match="another client is running"):
        Store(tmp_path / "s", GENEROUS)
    store.close()
    Store(tmp_path / "s", GENEROUS).close()


@pytest.mark.parametrize("content", [b"no database at all, but long enough to look at" * 100,
                                     b"SQLite format 3\0" + b"\xff" * 8000])
def test_a_damaged_spool_is_kept_aside_and_a_new_one_begun(tmp_path, content, caplog):
    (tmp_path / "s").write_bytes(content)
    store = Store(tmp_path / "s", GENEROUS)
    store.keep(readings(3))
    assert store.waiting == 3 and "damaged" in caplog.text
    assert [path.read_bytes() for path in tmp_path.glob("s.damaged-*")] == [content]
    store.close()


def test_a_folder_that_cannot_be_written_is_named(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(SettingsFault, match="folder cannot be made"):
        Store(tmp_path / "file" / "s", GENEROUS)


def test_starts_are_counted_and_old_forms_cleared(tmp_path):
    for number in range(1, 4):
        store = Store(tmp_path / "s", GENEROUS)
        assert store.starts == number
        store.keep(readings(1))
        store.close()
    spool = Spool(str(tmp_path / "s"), GENEROUS)
    assert len(everything(spool)) == 3
    spool.count_start()
    assert [spool.db.execute(f"SELECT count(*) FROM {table}").fetchone() for table in ("form", "boot")] == [(0,), (0,)]


KEEP_FOR_EVER = """
import sys, pathlib
from labmon_bench.store import Store
from labmon_bench.reading import reading_now
store = Store(pathlib.Path(sys.argv[1]), 1 << 30)
for number in range(10**9):
    store.keep([reading_now("eom-in", {"port1": float(number), "port2": 1e-6})])
    print(number, flush=True)
"""


def test_killed_in_the_middle_everything_that_was_kept_is_there(tmp_path):
    """kill -9 at a moment of its own choosing: what ``keep`` had returned for is in the file, once, and nothing is damaged."""
    kept = []
    for after in (1, 37, 200):
        process = subprocess.Popen([sys.executable, "-c", KEEP_FOR_EVER, str(tmp_path / "s")], stdout=subprocess.PIPE, text=True,
                                   env={"PYTHONPATH": str(ROOT / "clients" / "bench")})
        for line in process.stdout:
            if int(line) >= after:
                process.kill()
                break
        told = [*map(int, filter(str.strip, process.stdout.read().split("\n")[:-1]))] or [after]
        process.wait()
        process.stdout.close()
        kept.append(max(after, *told))
    spool = Spool(str(tmp_path / "s"), GENEROUS)
    by_boot = spool.db.execute("SELECT count(*), max(sequence) FROM reading JOIN form ON form.id = form GROUP BY boot "
                               "ORDER BY boot").fetchall()
    assert len(by_boot) == 3
    for told, (count, last) in zip(kept, by_boot, strict=True):
        assert count == last + 1 and told <= last <= told + 1


def test_forms_that_are_held_stay_where_they_are(tmp_path):
    spool = Spool(str(tmp_path / "s"), GENEROUS)
    spool.add(BOOT, numbered(3))
    spool.add(BOOT, numbered(3, tap="other"))
    form = next(part.form for part in spool.next_columns(10, (), {})[1] if part.tap == "eom-in")
    assert [part.tap for part in spool.next_columns(10, [form], {})[1]] == ["other"]
    assert spool.next_columns(10, [form], {form + 1: 2}) is None or form == 2
