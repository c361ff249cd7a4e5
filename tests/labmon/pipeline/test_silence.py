"""No reading: shown at three intervals, called at the set time, never for time in which the door was down."""

import numpy as np
import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from ingest.models import DoorUp
from labmon.alarms.models import Alarm, AlarmState
from labmon.people.models import Role
from labmon.pipeline.process import process_touched
from labmon.pipeline.silence import judge_silence
from labmon.tell.models import Message
from tests.factories import NOON_US, make_experiment, make_person, make_tap, store_readings
from tests.labmon.pipeline.lab import S, ports_of

pytestmark = pytest.mark.django_db
LAST_US = NOON_US + 29 * S


@pytest.fixture(autouse=True)
def door():
    return DoorUp.objects.create(
        process="00000000-0000-0000-0000-000000000001", from_us=NOON_US - 3600 * S, until_us=NOON_US + 36_000 * S
    )


def make_heard(*, interval_s=1.0, no_reading_after_s=None, arrival_us=None, owner=None):
    tap = make_tap(interval_s=interval_s)
    make_experiment(tap, owner=owner, no_reading_after_s=no_reading_after_s)
    store_readings(tap, NOON_US + np.arange(30) * S, arrival_us=arrival_us, **ports_of(np.full(30, 30.0)))
    process_touched(now_us=LAST_US)
    return tap


def test_shown_at_three_intervals_called_at_the_set_time_once():
    owner = make_person(Role.OWNER, email="owner@lab.example")
    tap = make_heard(no_reading_after_s=30.0, owner=owner)
    assert judge_silence(LAST_US + 3 * S) == []
    judge_silence(LAST_US + 4 * S)
    alarm = Alarm.objects.get()
    assert (alarm.kind, alarm.tap, alarm.level, alarm.message) == (
        "no-reading",
        tap,
        "warning",
        f"{tap.station.name}/{tap.name}: no reading for 4 s",
    )
    for later_s in (29, 30, 31, 90):
        judge_silence(LAST_US + later_s * S)
        assert Message.objects.count() == (later_s >= 30)
    alarm.refresh_from_db()
    assert (
        alarm.level == "alarm"
        and alarm.message.endswith("no reading for 30 s")
        and Message.objects.get().recipients == ["owner@lab.example"]
    )


def test_returns_when_a_reading_comes():
    tap = make_heard()
    judge_silence(LAST_US + 70 * S)
    store_readings(tap, [LAST_US + 80 * S], **ports_of(np.array([30.0])))
    judge_silence(LAST_US + 81 * S)
    alarm = Alarm.objects.get()
    assert alarm.returned_at is not None and alarm.state == AlarmState.RETURNED_UNACKNOWLEDGED


def test_hiccup_that_nobody_was_called_for_leaves_no_row():
    tap = make_heard()
    judge_silence(LAST_US + 10 * S)
    assert Alarm.objects.count() == 1
    store_readings(tap, [LAST_US + 11 * S], **ports_of(np.array([30.0])))
    judge_silence(LAST_US + 12 * S)
    assert not Alarm.objects.exists() and not Message.objects.exists()


def test_time_with_the_door_down_is_not_silence(door):
    make_heard()
    door.until_us = LAST_US + 2 * S
    door.save()
    judge_silence(LAST_US + 3600 * S)
    assert not Alarm.objects.exists()
    DoorUp.objects.create(process="00000000-0000-0000-0000-000000000002", from_us=LAST_US + 3600 * S, until_us=LAST_US + 3659 * S)
    judge_silence(LAST_US + 3602 * S)
    assert Alarm.objects.get().level == "warning"
    judge_silence(LAST_US + 3659 * S)
    assert Alarm.objects.get().level == "alarm"


def test_station_that_sends_a_batch_a_minute_is_not_silent_in_between():
    arrivals = NOON_US + np.arange(30) // 10 * 60 * S
    make_heard(arrival_us=arrivals)
    last_arrival_us = int(arrivals[-1])
    assert judge_silence(last_arrival_us + 150 * S) == []
    assert judge_silence(last_arrival_us + 181 * S) != []


def test_tap_that_no_experiment_watches_is_left_alone():
    tap = make_tap()
    store_readings(tap, [NOON_US], **ports_of(np.array([30.0])))
    assert judge_silence(NOON_US + 3600 * S) == []


def test_queries_do_not_grow_with_silent_taps():
    counts = []
    for taps in (2, 12):
        for _ in range(taps):
            make_heard()
        with CaptureQueriesContext(connection) as queries:
            judge_silence(LAST_US + 70 * S)
        counts.append(len(queries))
    assert counts[0] == counts[1]
