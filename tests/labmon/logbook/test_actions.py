from datetime import timedelta

import pytest
from django.utils import timezone

from labmon.audit.models import AuditEntry
from labmon.errors import NotAllowed, WriteError
from labmon.logbook.actions import edit_entry, say_change, strike_entry, write_entry
from labmon.logbook.models import ChangeKind, ConfigurationChange, LogEntry, LogTag
from labmon.logbook.queries import configuration_changes, configuration_changes_of, entries_of_run
from labmon.people.models import Role
from tests.factories import NOON, make_experiment, make_person, make_run, make_station, make_tap

pytestmark = pytest.mark.django_db
AT = timezone.now() - timedelta(hours=2)


def make_entry(by=None, **fields):
    station = fields.pop("station", None) or make_station()
    return write_entry(station, **{"by": by or make_person(Role.RESEARCHER), "at": AT, "text": "spooled anew"} | fields)


def test_entry_is_kept_and_written_down():
    ann, tap = make_person(Role.RESEARCHER), make_tap()
    entry = make_entry(ann, station=tap.station, tap=tap, until_at=AT + timedelta(minutes=3), tag=LogTag.CLEANED)
    assert (entry.by, entry.tap, entry.until_at - entry.at) == (ann, tap, timedelta(minutes=3))
    row = AuditEntry.objects.get()
    assert (row.person, row.action, row.subject) == (ann, "write log entry", f"tap/{tap.station.name}/{tap.name}")


@pytest.mark.parametrize(
    ("fields", "field"),
    [
        ({"at": timezone.now() + timedelta(days=1)}, "at"),
        ({"until_at": AT}, "until_at"),
        ({"until_at": AT + timedelta(days=2)}, "at"),
        ({"text": " "}, "text"),
        ({"text": "x" * 4001}, "text"),
        ({"text": "a\x00b"}, "text"),
        ({"tag": "gossip"}, "tag"),
        ({"change": "weather"}, "change"),
    ],
)
def test_what_cannot_be_meant_is_refused_by_field_and_leaves_nothing(fields, field):
    with pytest.raises(WriteError) as refused:
        make_entry(**fields)
    assert refused.value.field == field and refused.value.do
    assert not (LogEntry.objects.exists() or AuditEntry.objects.exists())


def test_tap_of_another_bench_is_refused():
    with pytest.raises(WriteError, match="no tap of"):
        make_entry(tap=make_tap())


def test_guest_writes_nothing():
    guest, station = make_person(Role.GUEST), make_station()
    guest.guest_stations.add(station)
    with pytest.raises(NotAllowed):
        make_entry(guest, station=station)


def test_one_tap_needs_no_words():
    assert make_entry(text="", tag=LogTag.TOUCHED).tag == "touched"


def test_edit_keeps_the_old_words():
    ann = make_person(Role.RESEARCHER)
    entry = make_entry(ann)
    for text in ("re-spooled", "re-spooled, radius 30 mm"):
        entry = edit_entry(entry, by=ann, at=AT, until_at=None, text=text, tag=LogTag.REPAIR)
    assert entry.text == "re-spooled, radius 30 mm"
    assert [(one.number, one.text, one.tag) for one in entry.befores.order_by("number")] == [
        (1, "spooled anew", "note"), (2, "re-spooled", "repair")]
    edit_entry(entry, by=ann, at=AT, until_at=None, text=entry.text, tag=LogTag.REPAIR)
    assert entry.befores.count() == 2


def test_others_do_not_edit_but_the_owner_of_the_bench_does():
    owner = make_person(Role.OWNER)
    entry = make_entry(station=make_station(owner=owner))
    with pytest.raises(NotAllowed, match="Only who wrote it"):
        edit_entry(entry, by=make_person(Role.RESEARCHER), at=AT, until_at=None, text="no", tag=LogTag.NOTE)
    with pytest.raises(NotAllowed, match="Only who wrote it"):
        strike_entry(entry, by=make_person(Role.OWNER))
    assert strike_entry(entry, by=owner).struck_at
    assert strike_entry(entry, by=make_person()).text == "spooled anew"


def test_change_cuts_until_it_is_withdrawn():
    ann, tap, other = make_person(Role.RESEARCHER), make_tap(), make_tap()
    entry = make_entry(ann, station=tap.station, change=ChangeKind.FIBRE)
    assert configuration_changes(tap, NOON - timedelta(days=9999)) == [AT]
    assert configuration_changes(tap, AT + timedelta(seconds=1)) == []
    assert configuration_changes(other, AT) == []
    say_change(entry, None, by=ann)
    assert configuration_changes(tap.station, AT) == [] and ConfigurationChange.objects.count() == 1
    say_change(entry, ChangeKind.JOINT, by=ann)
    assert configuration_changes(tap.station, AT) == [AT]
    strike_entry(entry, by=ann)
    assert configuration_changes(tap.station, AT) == []


def test_change_of_one_tap_leaves_its_neighbour():
    station = make_station()
    one, two = make_tap(station), make_tap(station)
    make_entry(station=station, tap=one, change=ChangeKind.JOINT)
    later = AT + timedelta(minutes=5)
    make_entry(station=station, at=later, change=ChangeKind.LASER)
    assert configuration_changes(one, AT) == [AT, later]
    assert configuration_changes(two, AT) == [later]
    assert configuration_changes(station, AT) == [AT, later]
    assert configuration_changes_of([one, two], AT) == {one.pk: [AT, later], two.pk: [later]}


def test_changes_of_many_taps_cost_one_query(django_assert_num_queries):
    taps = [make_tap() for _ in range(20)]
    with django_assert_num_queries(1):
        configuration_changes_of(taps, AT)


def test_change_moves_with_its_entry():
    ann = make_person(Role.RESEARCHER)
    entry = make_entry(ann, change=ChangeKind.FIBRE)
    earlier = AT - timedelta(hours=1)
    edit_entry(entry, by=ann, at=earlier, until_at=None, text="spooled anew", tag=LogTag.NOTE)
    assert configuration_changes(entry.station, earlier) == [earlier]


def test_an_entry_may_be_about_a_run_of_its_bench_only():
    tap, other = make_tap(), make_tap()
    run = make_run(make_experiment(tap), AT - timedelta(hours=1), 7200.0)
    assert make_entry(station=tap.station, run=run).run == run
    with pytest.raises(WriteError) as refused:
        make_entry(station=other.station, run=run)
    assert refused.value.field == "run" and LogEntry.objects.count() == 1


def test_a_run_gathers_what_names_it_and_what_was_written_of_its_time():
    tap, person = make_tap(), make_person(Role.RESEARCHER)
    run = make_run(make_experiment(tap), AT - timedelta(hours=1), 7200.0)
    before = run.starts_at - timedelta(minutes=30)
    kept = {make_entry(person, station=tap.station).pk,
            make_entry(person, station=tap.station, run=run, at=before, text="aligned for it").pk,
            make_entry(person, station=tap.station, at=before, until_at=AT, text="polished").pk}
    make_entry(person, station=tap.station, at=before, text="earlier")
    make_entry(person, text="another bench")
    assert {entry.pk for entry in entries_of_run(person, run)} == kept
