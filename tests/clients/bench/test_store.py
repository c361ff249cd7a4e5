"""A disk that is full: the client says so, goes on, and writes down what it had to drop."""

import shutil
import subprocess

import pytest
from labmon_bench import store as store_module
from labmon_bench.spool import Place
from labmon_bench.store import Store, StoreFault

from tests.clients.bench.conftest import GENEROUS, readings, send_all


@pytest.fixture
def full_store(store, monkeypatch):
    """Its file may not grow by a page; free pages inside it are used up."""
    store.keep(readings(200))
    fill(store)
    monkeypatch.setattr(store_module, "_DISK_AGAIN_S", 0.0)
    return store


def fill(store):
    db = store.disk.db
    db.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    db.execute("PRAGMA max_page_count = 1")  # SQLite takes the present size instead
    assert db.execute("PRAGMA freelist_count").fetchone() == (0,)


def free(store):
    store.disk.db.execute("PRAGMA max_page_count = 1000000")


def everything(store):
    found = []
    while (batch := store.next_batch(500)) is not None and len(found) < 100_000:
        found += [number for part in batch.columns for number in part.sequence]
        store.forget(batch, {part.tap: [(part.sequence[0], part.sequence[-1])] for part in batch.columns})
    return found


def test_on_a_full_disk_readings_are_held_in_memory_and_sent(full_store, caplog):
    for number in range(200, 2000, 20):
        full_store.keep(readings(20, number))
    assert full_store.waiting == 2000 and full_store.memory.waiting > 1000
    assert caplog.text.count("cannot be written") == 1 and "make room" in caplog.text
    assert sorted(everything(full_store)) == list(range(2000)) and full_store.dropped == 0


def test_when_the_disk_has_room_again_memory_is_written_to_it(full_store, caplog, tmp_path):
    for number in range(200, 2000, 20):
        full_store.keep(readings(20, number))
    free(full_store)
    full_store.keep(readings(1, 2000))
    full_store.next_batch(1)
    assert full_store.memory.waiting == 0 and full_store.disk.waiting == 2001 and "again" in caplog.text
    full_store.close()
    again = Store(tmp_path / "bench.spool", GENEROUS)
    assert sorted(everything(again)) == list(range(2001))
    again.close()


def test_when_memory_is_full_as_well_the_oldest_of_it_go_and_the_gap_is_recorded(full_store, caplog):
    full_store.memory.limit_bytes = 100_000
    for number in range(200, 6000, 50):
        full_store.keep(readings(50, number))
    dropped = full_store.dropped
    assert dropped > 1000 and "gap is recorded" in caplog.text
    free(full_store)
    full_store.next_batch(1)
    gaps = full_store.disk.gaps(10_000)
    assert sum(gap.count for gap in gaps) == dropped == full_store.dropped
    gone = {number for gap in gaps for number in range(gap.first, gap.last + 1)}
    assert sorted([*everything(full_store), *gone]) == list(range(6000))


def test_what_can_be_read_again_is_not_taken_while_the_disk_refuses(full_store):
    """A file's place could not be written beside memory's readings: after a kill they would be read and sent twice."""
    with pytest.raises(StoreFault):
        full_store.keep(readings(5000, 200), Place("file", {"offset": 5}, {}))
    assert full_store.waiting == 200
    free(full_store)
    full_store.keep(readings(5000, 200), Place("file", {"offset": 5}, {}))
    assert full_store.place("file") == {"offset": 5} and sorted(everything(full_store)) == list(range(5200))


def test_an_acknowledgement_that_cannot_be_written_is_remembered(full_store, bench_sender, sender, monkeypatch):
    """Else a full disk would have the same batch sent for ever."""
    import sqlite3

    true_remove = full_store.disk.remove

    def refuse(form, ranges):
        raise sqlite3.OperationalError("database or disk is full")

    monkeypatch.setattr(full_store.disk, "remove", refuse)
    bench_sender.most = 60
    for _ in range(4):
        bench_sender.turn()
    assert len(sender.stored()) == 200 and bench_sender.tally.known == 0 and full_store.next_batch(10) is None
    monkeypatch.setattr(full_store.disk, "remove", true_remove)
    full_store.keep(readings(1, 200))
    send_all(bench_sender)
    assert full_store.waiting == 0 and len(sender.stored()) == 201


@pytest.fixture
def small_disk(tmp_path):
    """A file system of 4 MB of its own."""
    folder = tmp_path / "disk"
    folder.mkdir()
    if shutil.which("mount") is None or subprocess.run(["mount", "-t", "tmpfs", "-o", "size=4m", "tmpfs", folder],
                                                       capture_output=True).returncode:
        pytest.skip("this user may not mount a small file system")
    yield folder
    subprocess.run(["umount", "-l", folder], check=True)


def test_on_a_disk_that_is_really_full(small_disk, monkeypatch, caplog):
    """4 MB for everything: the spool fills it, memory takes over, and what is acknowledged makes room again."""
    monkeypatch.setattr(store_module, "_DISK_AGAIN_S", 0.0)
    store = Store(small_disk / "s", GENEROUS)
    for number in range(0, 60_000, 100):
        store.keep(readings(100, number))
    assert store.memory.waiting > 0 and store.disk.waiting > 0 and "full" in store.disk_fault and "make room" in caplog.text
    assert sorted(everything(store)) == list(range(60_000)) and store.dropped == 0
    store.keep(readings(100, 60_000))
    assert not store.disk_fault and store.memory.waiting == 0
    store.close()


def test_a_disk_filled_by_others_from_the_start(small_disk):
    """Not even the spool can be made: the client says so and ends with a remedy; it does not run without one."""
    from labmon_bench.settings import SettingsFault

    (small_disk / "other").write_bytes(b"0" * (4 << 20))
    with pytest.raises(SettingsFault, match="make room"):
        Store(small_disk / "s", GENEROUS)
