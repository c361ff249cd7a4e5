"""Past days move from blocks into files and stay the same readings, whatever fails on the way."""

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from django.conf import settings
from django.db import connection

from ingest.models import Block, BlockBoot, DayFile, DayFileBoot, LeftFile
from ingest.store import read
from ingest.store.append import write_blocks
from ingest.store.days import seal
from ingest.store.days.left import sweep_left_files
from ingest.store.days.seal import DAY_US as DAY_LENGTH_US
from ingest.store.days.seal import days_due, seal_day, seal_days
from ingest.store.days.storage import days_storage
from ingest.store.read import newest_readings, read_readings
from ingest.store.seal import seal_tap
from tests.ingest.conftest import EVER, two_port
from tests.ingest.store.days.conftest import DAY_US, late
from tests.ingest.store.test_codec import assert_same

pytestmark = pytest.mark.django_db(transaction=True)
STEPS = ["mark_left", "_write", "_save", "_read_back", "_check_unchanged", "take_mark", "_name_file", "_delete_blocks", "_commit"]
HOUR_US = 3_600_000_000


class Fault(Exception):
    """Something broke on purpose."""


def test_sealing_a_day_changes_no_reading(past_day):
    tap, before = past_day.tap().pk, past_day.stored()
    assert seal_day(tap, DAY_US) and not seal_day(tap, DAY_US)
    assert not Block.objects.exists() and not BlockBoot.objects.exists() and not LeftFile.objects.exists()
    row = DayFile.objects.get()
    assert (row.count, row.first_at_us, row.last_at_us) == (30, before.at_us[0], before.at_us[-1])
    assert row.name.startswith("bench-1/eom-in/2025/2025-06-15-") and days_storage().size(row.name) == row.size
    assert_same(before, past_day.stored())
    assert [(one.sequences.lower, one.sequences.upper) for one in DayFileBoot.objects.all()] == [(0, 40_010)]


def test_days_are_sealed_when_they_have_been_over_for_some_hours(past_day):
    end_us, tap = DAY_US + DAY_LENGTH_US, past_day.tap().pk
    assert days_due(end_us + 6 * HOUR_US - 1, 10) == [] and days_due(end_us + 6 * HOUR_US, 10) == [(tap, DAY_US)]
    assert seal_days(end_us + 5 * HOUR_US) == 0 and seal_days(end_us + 6 * HOUR_US) == 1 and seal_days(end_us + 6 * HOUR_US) == 0


def test_days_before_1970_are_days_too(sender):
    write_blocks(sender.tap(), np.array([-5, 5]), {"port1": np.ones(2), "port2": np.ones(2)})
    assert days_due(DAY_US, 10) == [(sender.tap().pk, -DAY_LENGTH_US), (sender.tap().pk, 0)]
    assert seal_days() == 2 and sender.stored().at_us.tolist() == [-5, 5]


def test_late_readings_are_read_beside_the_file_and_merged_into_a_new_version(past_day):
    tap = past_day.tap().pk
    seal_day(tap, DAY_US)
    first = DayFile.objects.get()
    late(past_day)
    before = past_day.stored()
    assert before.sequence.tolist() == [*range(10), *range(20, 25), *range(700, 710), *range(40_000, 40_010)]
    assert seal_day(tap, DAY_US)
    second = DayFile.objects.get()
    assert second.name != first.name and second.count == 35 and not Block.objects.exists()
    assert_same(before, past_day.stored())
    assert list(LeftFile.objects.values_list("name", flat=True)) == [first.name]
    assert days_storage().exists(first.name), "who saw the older row can still open it"
    assert sweep_left_files() == 0 and sweep_left_files(older_s=-1) == 1 and not days_storage().exists(first.name)
    assert_same(before, past_day.stored())


def test_a_trickle_of_late_readings_rewrites_a_file_only_after_some_hours(past_day):
    assert seal_days() == 1
    late(past_day)
    sealed_us = DayFile.objects.get().sealed_us
    assert seal_days(sealed_us + 6 * HOUR_US - 1) == 0 and seal_days(sealed_us + 6 * HOUR_US) == 1


def test_a_repeated_reading_is_known_from_the_file_and_another_value_is_set_aside(past_day):
    seal_day(past_day.tap().pk, DAY_US)
    again = past_day.send(two_port(0, 10, start_us=DAY_US))
    assert (again["stored"], again["known"]) == (0, 10)
    other = two_port(700, 1, start_us=DAY_US)
    other["taps"]["eom-in"]["port1"] = [0.5]
    answer = past_day.send(other)
    assert answer["stored"] == 0 and len(answer["set_aside"]) == 1
    timed = {"taps": {"dark": {"at": [DAY_US + 5], "port2": [0.25]}}}
    past_day.send(timed)
    seal_tap(past_day.tap("dark").pk)
    seal_day(past_day.tap("dark").pk, DAY_US)
    assert past_day.send(timed)["known"] == 1, "without boot and sequence a reading is known by its time"


def test_unknown_columns_and_columns_that_come_later_are_kept(sender):
    sender.send(two_port(0, 3, start_us=DAY_US))
    sender.send(two_port(50_000, 3, start_us=DAY_US, lamp=[1, 2, 3], temperature_c=[20.5, None, 21.0]))
    seal_tap(sender.tap().pk)
    before = sender.stored()
    seal_day(sender.tap().pk, DAY_US)
    after = sender.stored()
    assert_same(before, after)
    assert after.unknown.tolist() == before.unknown.tolist() and np.isnan(after.column("temperature_c")[[0, 1, 2, 4]]).all()


def test_a_large_day_is_written_in_pieces(sender, monkeypatch):
    monkeypatch.setattr(seal, "_WHOLE_UP_TO", 50)
    monkeypatch.setattr(seal, "PIECE_READINGS", 40)
    at_us = DAY_US + np.arange(0, 86_400, 300) * 1_000_000
    write_blocks(sender.tap(), at_us, {"port1": np.linspace(0, 1, len(at_us)), "port2": np.ones(len(at_us))}, boot="b",
                 sequence=np.arange(len(at_us)))
    before = sender.stored()
    seal_day(sender.tap().pk, DAY_US)
    assert_same(before, sender.stored())
    assert len(bytes(DayFile.objects.get().checks)) == 4 * (1 + 6 * 10), "six pieces of ten columns"


def test_a_read_asks_one_question_and_opens_only_the_files_it_needs(past_day, monkeypatch):
    tap = past_day.tap().pk
    for day in range(1, 4):
        past_day.send(two_port(100_000 * day, 5, start_us=DAY_US + day * DAY_LENGTH_US - 100_000 * day * 1_000_000))
    seal_tap(tap)
    assert seal_days() == 4
    asked, opened = [], []
    storage, true_fetch = type(days_storage()), read.fetch
    true_open = storage.open
    monkeypatch.setattr(storage, "open", lambda self, name, mode="rb": (opened.append(name), true_open(self, name, mode))[1])
    monkeypatch.setattr(read, "fetch", lambda *how: (asked.append(how), true_fetch(*how))[1])
    assert len(read_readings(tap, *EVER)) == 45 and (len(asked), len(opened)) == (1, 4)
    assert len(read_readings(tap, DAY_US + DAY_LENGTH_US, DAY_US + 2 * DAY_LENGTH_US)) == 5
    assert (len(asked), len(opened)) == (2, 5)
    assert newest_readings([tap], count=7)[tap].sequence.tolist() == [200_003, 200_004, *range(300_000, 300_005)]
    assert (len(asked), len(opened)) == (3, 7)
    past_day.send(two_port(500_000, 7, start_us=DAY_US))
    assert newest_readings([tap], count=7)[tap].sequence.tolist() == list(range(500_000, 500_007))
    assert (len(asked), len(opened)) == (4, 7), "what is newer than a file is enough"


def break_at(monkeypatch, step, is_after):
    true_step = getattr(seal, step)

    def broken(*args):
        if is_after:
            true_step(*args)
        raise Fault(step)

    monkeypatch.setattr(seal, step, broken)


@pytest.mark.parametrize("is_resealed", [False, True], ids=["first", "again"])
@pytest.mark.parametrize("is_after", [False, True], ids=["before", "after"])
@pytest.mark.parametrize("step", STEPS)
def test_a_fault_at_any_step_loses_nothing_and_doubles_nothing(past_day, monkeypatch, step, is_after, is_resealed):
    tap = past_day.tap().pk
    if is_resealed:
        seal_day(tap, DAY_US)
        late(past_day)
    before = past_day.stored()
    with monkeypatch.context() as patch:
        break_at(patch, step, is_after)
        with pytest.raises(Fault):
            seal_day(tap, DAY_US)
    assert_same(before, past_day.stored())
    is_done = step == "_commit" and is_after
    assert DayFile.objects.count() == (is_done or is_resealed) and Block.objects.exists() is not is_done
    assert seal_day(tap, DAY_US) is not is_done
    assert_same(before, past_day.stored())
    sweep_left_files(older_s=-1)
    assert not LeftFile.objects.exists()
    folder = Path(days_storage().path("bench-1/eom-in"))
    assert [path.name for path in folder.rglob("*") if path.is_file()] == [Path(DayFile.objects.get().name).name]


def test_readings_that_come_while_the_file_is_written_put_it_off(past_day, monkeypatch, caplog):
    tap = past_day.tap().pk
    true_read_back = seal._read_back
    monkeypatch.setattr(seal, "_read_back", lambda *args: (true_read_back(*args), late(past_day)))
    assert seal_days() == 0 and "day_not_sealed" in caplog.text
    assert not DayFile.objects.exists() and len(past_day.stored()) == 35
    monkeypatch.undo()
    assert seal_day(tap, DAY_US) and len(past_day.stored()) == 35


def test_a_disk_that_gives_back_other_bytes_is_noticed_before_the_blocks_go(past_day, monkeypatch):
    def save_badly(name, draft):
        draft.seek(0)
        whole = bytearray(draft.read())
        whole[len(whole) // 2] ^= 1
        Path(days_storage().path(name)).parent.mkdir(parents=True, exist_ok=True)
        Path(days_storage().path(name)).write_bytes(whole)

    monkeypatch.setattr(seal, "_save", save_badly)
    before = past_day.stored()
    assert seal_days() == 0 and not DayFile.objects.exists()
    assert_same(before, past_day.stored())


def test_a_file_swept_away_before_its_row_is_written_puts_the_sealing_off(past_day, monkeypatch):
    true_read_back = seal._read_back
    monkeypatch.setattr(seal, "_read_back", lambda *args: (true_read_back(*args), sweep_left_files(older_s=-1)))
    assert seal_days() == 0 and not DayFile.objects.exists() and len(past_day.stored()) == 30


def test_a_damaged_block_keeps_its_day_in_blocks_and_stops_no_other(past_day, caplog):
    past_day.send({"boot": "a", "taps": {"air": {"sequence": [1], "at": [DAY_US], "temperature_c": [20.0]}}})
    seal_tap(past_day.tap("air").pk)
    with connection.cursor() as cursor:
        cursor.execute("UPDATE ingest_block SET body = set_byte(body, 5, 99) WHERE tap_id = %s", [past_day.tap().pk])
    assert seal_days() == 1 and "day_not_sealed" in caplog.text
    assert DayFile.objects.get().tap.name == "air" and Block.objects.count() == 3


def test_files_go_with_their_station_by_way_of_the_sweep(past_day):
    seal_day(past_day.tap().pk, DAY_US)
    name = DayFile.objects.get().name
    past_day.station.delete()
    assert LeftFile.objects.get().name == name
    assert sweep_left_files(older_s=-1) == 1 and not days_storage().exists(name)


@pytest.mark.slow
@pytest.mark.parametrize("step", STEPS)
def test_kill_9_behind_any_step_loses_nothing(past_day, step):
    """Another process seals and kills itself behind the step; the database ends its transaction."""
    tap, before = past_day.tap().pk, past_day.stored()
    code = (f"import django, os, signal; django.setup()\nfrom ingest.store.days import seal\ntrue = seal.{step}\n"
            f"def last(*args):\n    true(*args)\n    os.kill(os.getpid(), signal.SIGKILL)\n"
            f"seal.{step} = last\nseal.seal_day({tap}, {DAY_US})\n")
    named = connection.settings_dict["NAME"]
    scheme, rest = os.environ["LABMON_DATABASE_URL"].split("://")
    host, _, name = rest.partition("/")
    url = f"{scheme}://{host}/{named}" + (f"?{name.split('?', 1)[1]}" if "?" in name else "")
    done = subprocess.run([sys.executable, "-c", code], cwd=settings.BASE_DIR, capture_output=True, text=True,
                          env=os.environ | {"LABMON_DATABASE_URL": url, "DJANGO_SETTINGS_MODULE": "labmon.settings"})
    assert done.returncode == -9, done.stderr
    assert_same(before, past_day.stored())
    assert seal_day(tap, DAY_US) is (step != "_commit")
    assert_same(before, past_day.stored())
    sweep_left_files(older_s=-1)
    assert len([path for path in Path(days_storage().path("bench-1")).rglob("*") if path.is_file()]) == 1
