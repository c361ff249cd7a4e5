from datetime import timedelta

import pytest
from django.utils import timezone

from labmon.logbook.actions import note_change, strike_entry, write_entry
from labmon.logbook.models import ChangeKind, LogTag
from labmon.logbook.queries import log_entries, marks_of, newest_change
from labmon.people.models import Role
from tests.factories import make_person, make_station, make_tap

pytestmark = pytest.mark.django_db
AT = timezone.now() - timedelta(days=2)
HOUR = timedelta(hours=1)


@pytest.fixture
def ann():
    return make_person(Role.RESEARCHER)


def write(station, ann, hours, **fields):
    return write_entry(station, **{"by": ann, "at": AT + hours * HOUR, "text": f"at {hours}"} | fields)


def test_pages_by_what_they_are_about_and_lead_on_without_loss(ann):
    station = make_station()
    for hours in (3, 1, 2, 2, 5):
        write(station, ann, hours)
    first = log_entries(ann, stations=[station.name], limit=3)
    rest = log_entries(ann, stations=[station.name], limit=3, before_id=first[-1].pk)
    assert [one.text for one in first + rest] == ["at 5", "at 3", "at 2", "at 2", "at 1"]
    assert len({one.pk for one in first + rest}) == 5
    assert log_entries(ann, before_id=10**9) == []


def test_guest_reads_named_benches_only(ann):
    guest, seen, hidden = make_person(Role.GUEST), make_station(), make_station()
    guest.guest_stations.add(seen)
    write(seen, ann, 1), write(hidden, ann, 1)
    assert [one.station for one in log_entries(guest)] == [seen]


def test_marks_are_those_that_touch_the_span_and_the_tap(ann):
    station = make_station()
    tap, other = make_tap(station), make_tap(station)
    write(station, ann, 0, text="before")
    write(station, ann, 0, until_at=AT + 3 * HOUR, text="reaches in")
    write(station, ann, 3, tap=tap, text="mine")
    write(station, ann, 3, tap=other, text="the neighbour's")
    write(make_station(), ann, 3, text="another bench")
    strike_entry(write(station, ann, 3, text="struck"), by=ann)
    write(station, ann, 4, text="after")
    note_change(station, ChangeKind.GAIN, AT + 3 * HOUR, by=None, tap=tap, text="a new gain")
    marks = marks_of([tap], AT + 2 * HOUR, AT + 4 * HOUR)
    assert [mark.text for mark in marks] == ["reaches in", "mine", "a new gain"]
    assert [mark.change for mark in marks] == [None, None, "gain"]


def test_cost_does_not_grow(ann, django_assert_num_queries):
    station = make_station()
    tap = make_tap(station)
    for hours in range(30):
        write(station, ann, hours, tag=LogTag.CLEANED, change=ChangeKind.JOINT)
    with django_assert_num_queries(2):
        assert len(marks_of([tap], AT, AT + 40 * HOUR)) == 30
    with django_assert_num_queries(1):
        rows = log_entries(ann, stations=[station.name])
        assert [(row.by.username, row.station.bench.owner, row.change.kind, row.edits) for row in rows[:1]]


def test_the_newest_change_that_counts(ann):
    station = make_station()
    assert newest_change(station) is None
    write(station, ann, 1, change=ChangeKind.FIBRE)
    later = write(station, ann, 2, change=ChangeKind.LASER)
    assert newest_change(station).kind == "laser"
    strike_entry(later, by=ann)
    assert newest_change(station).kind == "fibre"
