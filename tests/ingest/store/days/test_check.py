"""Damage to day files, blocks and batches is found, named and written down, and never read as data."""

from pathlib import Path

import pytest
from django.core.management import CommandError, call_command
from django.db import connection

from ingest.models import DayFile
from ingest.store.days.check import check_days
from ingest.store.days.faults import known_holes, note_faults
from ingest.store.days.seal import seal_day
from ingest.store.days.storage import days_storage
from ingest.store.read import DamagedStore, HoleKind, find_readings, read_readings
from ingest.store.seal import seal_tap
from tests.ingest.conftest import EVER, two_port
from tests.ingest.store.days.conftest import DAY_US, S

pytestmark = pytest.mark.django_db(transaction=True)


@pytest.fixture
def sealed(past_day):
    """The day in its file, and ten readings of the next day in a block."""
    seal_day(past_day.tap().pk, DAY_US)
    past_day.send(two_port(90_000, 10, start_us=DAY_US))
    seal_tap(past_day.tap().pk)
    return past_day


def path_of(row):
    return Path(days_storage().path(row.name))


def spoil(row):
    whole = bytearray(path_of(row).read_bytes())
    whole[len(whole) // 3] ^= 1
    path_of(row).write_bytes(whole)


@pytest.mark.parametrize("harm", [spoil, lambda row: path_of(row).unlink()], ids=["changed", "gone"])
def test_an_unreadable_file_is_a_hole_and_the_rest_of_the_tap_is_read(sealed, harm, capsys):
    tap, row = sealed.tap().pk, DayFile.objects.get()
    harm(row)
    with pytest.raises(DamagedStore, match=f"tap {tap}, day file from 2025-06-15.*{row.name}.*restore this file from a backup"):
        read_readings(tap, *EVER)
    found = find_readings(tap, *EVER)
    assert found.readings.sequence.tolist() == list(range(90_000, 90_010))
    (hole,) = found.holes
    assert (hole.kind, hole.from_us, hole.until_us) == (HoleKind.UNREADABLE, row.first_at_us, row.last_at_us)
    assert len(read_readings(tap, DAY_US + 86_400 * S, EVER[1])) == 10, "other spans do not open it"
    note_faults(found.holes)
    assert [one.name for one in known_holes(tap, *EVER)] == [row.name] and known_holes(tap, DAY_US + 86_400 * S, EVER[1]) == []
    with pytest.raises(CommandError, match="1 of 1 day files, 1 blocks, 0 batches cannot be read"):
        call_command("verify_store")
    assert f"day file {row.name}: it" in capsys.readouterr().out


def test_a_file_put_back_is_well_again(sealed):
    row = DayFile.objects.get()
    whole = path_of(row).read_bytes()
    path_of(row).unlink()
    assert [fault.what for fault in check_days(older_s=-1)] == [f"day file {row.name}"] and DayFile.objects.get().fault
    path_of(row).write_bytes(whole)
    assert check_days() == [] and DayFile.objects.get().fault == "", "faulty files are looked at again before their time"


def test_files_are_read_again_after_some_days_the_longest_unread_first(sealed, monkeypatch):
    assert check_days() == []
    spoil(DayFile.objects.get())
    assert check_days() == [], "read at its sealing, not due yet"
    DayFile.objects.update(verified_us=0)
    assert len(check_days()) == 1


def test_all_well_and_strange_files_are_told(sealed, capsys):
    folder = path_of(DayFile.objects.get()).parent
    (folder / "2031-01-01-strange.parquet").write_bytes(b"?")
    assert "All well: 1 day files, 1 blocks, 0 batches." in run("verify_store", capsys)
    assert "no row names bench-1/eom-in/2025/2031-01-01-strange.parquet" in run("verify_store", capsys)
    (folder / "2031-01-01-strange.parquet").unlink()


def run(name, capsys):
    print(call_command(name))
    return capsys.readouterr().out


@pytest.mark.parametrize("table", ["ingest_block", "ingest_inboxrow"])
def test_damaged_rows_are_listed(sealed, table, capsys):
    sealed.send(two_port(95_000, 3, start_us=DAY_US))
    with connection.cursor() as cursor:
        cursor.execute(f"UPDATE {table} SET body = set_byte(body, 60, get_byte(body, 60) # 255)")
    with pytest.raises(CommandError, match="cannot be read"):
        call_command("verify_store")
    assert f"{table} " in capsys.readouterr().out
