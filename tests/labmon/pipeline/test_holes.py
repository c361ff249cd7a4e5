"""Raw readings that are gone or unreadable: what was told of them stands, the tap is judged on, nobody else waits."""

import numpy as np
import pytest
from django.db import connection

from ingest.models import DayFile, Touch
from ingest.store.days.seal import seal_days
from ingest.store.days.storage import days_storage
from labmon.alarms.models import Alarm
from labmon.benches.keeping import forget_old_days, set_keep_rule
from labmon.experiments.actions import set_limit
from labmon.pipeline.catch_up import catch_up
from labmon.pipeline.nightly import make_day_statistics
from labmon.pipeline.process import process_touched
from labmon.pipeline.rolling import compact_closed_days
from tests.factories import make_experiment, make_tap, store_readings

pytestmark = pytest.mark.django_db
S = 1_000_000
DAY = 86_400 * S
DAY_US = 1_750_000_000 * S // DAY * DAY
NOW_US = DAY_US + 40 * DAY
NOON_US = DAY_US + DAY // 2


def told_day():
    """A tap with an excursion of ten minutes at noon of a day long over; its alarm has been told and acknowledged nowhere."""
    tap = make_tap()
    at_us = NOON_US + np.arange(3600) * S
    is_bad = (np.arange(3600) >= 600) & (np.arange(3600) < 1200)
    limit = _limit(tap)
    store_readings(tap, at_us, port1=1e-3, port2=np.where(is_bad, 1e-4, 1e-6), sequence=np.arange(3600), boot="b")
    catch_up(now_us=NOW_US)
    compact_closed_days(NOW_US)
    seal_days(NOW_US)
    Alarm.objects.update(is_late=False, state="returned-unacknowledged")
    return tap, limit


def _limit(tap):
    from datetime import UTC, datetime

    return set_limit(make_experiment(tap), tap, "er_db", alarm=20.0, by=None, valid_from=datetime(2025, 6, 1, tzinfo=UTC))


def judge_again(tap):
    Touch.objects.create(tap=tap, first_at_us=NOON_US, last_at_us=NOON_US + 3600 * S, arrival_us=NOW_US)
    process_touched(now_us=NOW_US)


def forget(tap):
    set_keep_rule(tap, 1, by=None)
    make_day_statistics(NOW_US)
    assert forget_old_days(NOW_US) == 1


def lose(tap):
    days_storage().delete(DayFile.objects.get(tap=tap).name)


@pytest.mark.parametrize("harm", [forget, lose])
def test_a_told_alarm_stands_when_its_readings_are_gone(harm):
    tap, _ = told_day()
    before = Alarm.objects.get()
    assert before.raised_at and not before.is_withdrawn
    harm(tap)
    judge_again(tap)
    after = Alarm.objects.get()
    assert (after.raised_at, after.returned_at, after.is_withdrawn) == (before.raised_at, before.returned_at, False)
    assert not Touch.objects.exists()


def test_without_a_hole_late_data_still_take_an_alarm_back():
    """The counterpart: the guard is the hole's, not the replay's."""
    tap, _ = told_day()
    with connection.cursor() as cursor:
        cursor.execute("DELETE FROM ingest_dayfileboot; DELETE FROM ingest_dayfile")
    judge_again(tap)
    assert Alarm.objects.get().is_withdrawn


def test_an_unreadable_day_stops_no_other_tap_and_is_written_down(caplog):
    tap, _ = told_day()
    lose(tap)
    other = make_tap()
    store_readings(other, NOW_US - np.arange(5)[::-1] * S, port1=1e-3, port2=1e-6)
    judge_again(tap)
    assert not Touch.objects.exists() and "readings_unreadable" in caplog.text
    assert "cannot be opened" in DayFile.objects.get(tap=tap).fault
