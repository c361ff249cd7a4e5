from datetime import timedelta

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from labmon.alarms.models import AlarmBounds
from labmon.alarms.queries import alarm_row, alarm_rows, alarm_spans
from labmon.people.models import Role
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_station, make_tap, store_alarm

pytestmark = pytest.mark.django_db
MINUTE_US = 60_000_000


def make_alarm(minute=0, tap=None, **fields):
    tap = tap or make_tap()
    return store_alarm(
        **{
            "kind": "untrusted",
            "tap": tap,
            "experiment": make_experiment(tap),
            "message": "m",
            "raised_at": NOON + timedelta(minutes=minute),
        }
        | fields
    )


def test_newest_first_and_filters():
    tap = make_tap(make_station("n2"))
    old, new = make_alarm(0), make_alarm(5, tap)
    done = make_alarm(3, returned_at=NOON + timedelta(minutes=4), acknowledged_at=NOON)
    reader = make_person()
    assert [row.id for row in alarm_rows(reader)] == [new.pk, done.pk, old.pk]
    assert [row.id for row in alarm_rows(reader, state="normal")] == [done.pk]
    assert [row.id for row in alarm_rows(reader, state=["normal", "unacknowledged"], limit=2)] == [new.pk, done.pk]
    assert [row.id for row in alarm_rows(reader, station="n2")] == [new.pk]
    assert [row.id for row in alarm_rows(reader, experiment=old.experiment_id)] == [old.pk]
    assert [row.id for row in alarm_rows(reader, is_open=True)] == [new.pk, old.pk]
    assert [row.id for row in alarm_rows(reader, is_open=False)] == [done.pk]


def test_row_has_earlier_bounds_and_words():
    alarm = make_alarm(acknowledged_by=make_person(username="joren"), acknowledged_at=NOON)
    AlarmBounds.objects.create(alarm=alarm, raised_at=NOON - timedelta(minutes=1), returned_at=NOON)
    row = alarm_row(alarm.pk, make_person())
    assert (row.acknowledged_by, row.earlier_bounds) == ("joren", [(NOON - timedelta(minutes=1), NOON)])
    assert row.tap == f"{row.station}/{alarm.tap.name}" and row.is_open


def test_guest_does_not_see_other_benches_alarms():
    alarm = make_alarm()
    guest = make_person(Role.GUEST)
    assert alarm_rows(guest) == [] and alarm_row(alarm.pk, guest) is None
    guest.guest_stations.add(alarm.tap.station)
    assert alarm_row(alarm.pk, guest).id == alarm.pk


def test_spans_that_overlap_a_plot():
    tap = make_tap()
    for minute, until in ((0, 1), (10, 20), (30, 31)):
        make_alarm(minute, tap, returned_at=NOON + timedelta(minutes=until), quantity="er_db")
    make_alarm(15, tap, returned_at=NOON + timedelta(minutes=16), is_withdrawn=True)
    assert alarm_spans(tap.pk, NOON_US + 15 * MINUTE_US, NOON_US + 30 * MINUTE_US) == [
        (NOON_US + 10 * MINUTE_US, NOON_US + 20 * MINUTE_US, "alarm", "er_db")
    ]


def test_queries_do_not_grow():
    reader, counts = make_person(), []
    for number in (2, 10):
        for _ in range(number):
            make_alarm()
        with CaptureQueriesContext(connection) as queries:
            alarm_rows(reader)
        counts.append(len(queries))
    assert counts[0] == counts[1]
