"""Statistics of closed days: marked once, made once, made anew for late data, never worse than what was known."""

import threading

import numpy as np
import pytest
from django.db import connections, transaction

from analysis.models import DayStatistics, DayStatisticsDue
from analysis.record.calibrations import new_version
from analysis.record.statistics import newest_days
from ingest.models import Block, ForgottenDay, InboxRow, TapKind
from ingest.times import at_of
from labmon.claims import STATISTICS, lock_tap
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.nightly import LOOK_BACK_DAYS, make_day_statistics, mark_closed_days
from tests.factories import NOON_US, make_tap, store_readings
from tests.labmon.pipeline.lab import S, ports_of

pytestmark = pytest.mark.django_db
DAY_US = 86_400 * S
MIDNIGHT_US = NOON_US - DAY_US // 2
NEXT_MIDNIGHT_US = MIDNIGHT_US + DAY_US
JUST_OPEN_US, CLOSED_US = NEXT_MIDNIGHT_US + 3599 * S, NEXT_MIDNIGHT_US + 3600 * S


def send(tap, count=200, from_us=NOON_US, er_db=25.0):
    store_readings(tap, from_us + np.arange(count) * S, **ports_of(np.full(count, er_db)))


@pytest.fixture
def tap():
    tap = make_tap()
    send(tap)
    catch_up(NOON_US + 300 * S)
    return tap


def test_a_day_is_made_an_hour_after_its_end_and_once(tap):
    assert make_day_statistics(JUST_OPEN_US) == 0
    assert make_day_statistics(CLOSED_US) == 1
    row = DayStatistics.objects.get()
    assert (row.tap_id, row.day_us, row.readings) == (tap.pk, MIDNIGHT_US, 200)
    assert row.facts["er"]["leak_mean_db"] == pytest.approx(25.0, abs=1e-9)
    assert make_day_statistics(CLOSED_US) == 0 == DayStatisticsDue.objects.count()
    assert DayStatistics.objects.get().made_at == row.made_at


def test_marking_twice_marks_once(tap):
    assert (mark_closed_days(CLOSED_US), mark_closed_days(CLOSED_US)) == (1, 0)


def test_nights_that_beat_missed_are_made_up_for_eight_days(tap):
    for day in range(1, 12):
        send(tap, 10, NOON_US + day * DAY_US)
    catch_up(NOON_US + 11 * DAY_US + 60 * S)
    DayStatisticsDue.objects.all().delete()
    DayStatistics.objects.all().delete()
    assert make_day_statistics(CLOSED_US + 11 * DAY_US) == LOOK_BACK_DAYS
    assert newest_days([tap.pk])[tap.pk].day_us == MIDNIGHT_US + 11 * DAY_US


def test_old_days_that_come_in_late_are_made_too(tap):
    send(tap, 50, NOON_US - 100 * DAY_US)
    catch_up(CLOSED_US)
    make_day_statistics(CLOSED_US)
    assert DayStatistics.objects.get(day_us=MIDNIGHT_US - 100 * DAY_US).readings == 50


def test_late_readings_and_calibrations_make_a_day_anew(tap):
    make_day_statistics(CLOSED_US)
    store_readings(tap, NOON_US + (500 + np.arange(100)) * S, **ports_of(np.full(100, 25.0)))
    catch_up(CLOSED_US)
    assert make_day_statistics(CLOSED_US) == 1
    assert DayStatistics.objects.get().readings == 300
    new_version(tap, at_of(MIDNIGHT_US), {"gain_ratio": 2.0})
    catch_up(CLOSED_US)
    assert make_day_statistics(CLOSED_US) == 1
    expected = 25.0 - 10.0 * np.log10(2.0)      # F-09: net 2 times the gain ratio
    assert DayStatistics.objects.get().facts["er"]["leak_mean_db"] == pytest.approx(expected, abs=1e-9)


def test_a_climate_tap_has_no_row():
    air = make_tap(kind=TapKind.CLIMATE)
    store_readings(air, NOON_US + np.arange(50) * S, temperature_c=21.0)
    catch_up(CLOSED_US)
    assert make_day_statistics(CLOSED_US) == 0


def test_a_row_outlives_its_raw_readings(tap):
    make_day_statistics(CLOSED_US)
    InboxRow.objects.all().delete()
    Block.objects.all().delete()
    ForgottenDay.objects.create(tap=tap, day_us=MIDNIGHT_US, count=200, size=1, rule="1 day", forgotten_us=CLOSED_US)
    DayStatisticsDue.objects.create(tap=tap, day_us=MIDNIGHT_US)
    assert make_day_statistics(CLOSED_US) == 1
    assert DayStatistics.objects.get().readings == 200


def test_a_day_of_too_many_readings_says_so(tap, monkeypatch):
    monkeypatch.setattr("analysis.record.statistics.MOST_READINGS", 100)
    make_day_statistics(CLOSED_US)
    assert DayStatistics.objects.get().facts["why_none"].startswith("The span holds some 200 readings")


def test_a_fault_of_one_day_is_told_and_keeps_no_other_from_being_made(tap, monkeypatch, caplog):
    def broken(*_args, **_more):
        raise ValueError("no figure")

    monkeypatch.setattr("analysis.record.statistics.tap_statistics", broken)
    assert make_day_statistics(CLOSED_US) == 1
    assert "no figure" in DayStatistics.objects.get().facts["why_none"]
    assert [record.message for record in caplog.records if record.levelname == "ERROR"] == ["day_statistics_failed"]


def test_time_is_bounded(tap):
    send(make_tap(), 20)
    assert make_day_statistics(CLOSED_US, for_s=0.0) == 0
    assert DayStatisticsDue.objects.exists()


@pytest.mark.django_db(transaction=True)
def test_a_tap_that_another_worker_has_is_left_to_it(transactional_db):
    tap = make_tap()
    send(tap)
    catch_up(NOON_US + 300 * S)
    held, done = threading.Event(), threading.Event()

    def other():
        with transaction.atomic():
            lock_tap(STATISTICS, tap.pk)
            held.set()
            done.wait(30)
        connections.close_all()

    worker = threading.Thread(target=other)
    worker.start()
    try:
        assert held.wait(30)
        assert make_day_statistics(CLOSED_US) == 0
    finally:
        done.set()
        worker.join()
    assert make_day_statistics(CLOSED_US) == 1
