"""Alarms, read and acknowledged."""

from datetime import timedelta

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from labmon.alarms.models import AlarmKind
from labmon.audit.models import AuditEntry
from tests.factories import NOON, make_experiment, make_tap, store_alarm

ALARMS = "/api/v1/alarms"
#: The contract's list, word for word.
FIELDS = {"id", "experiment", "tap", "quantity", "level", "state", "raised_at", "returned_at", "acknowledged_at", "value",
          "limit", "cause", "message"}


def make_alarm(tap, experiment=None, **fields):
    return store_alarm(**{"kind": AlarmKind.UNTRUSTED, "tap": tap, "experiment": experiment, "raised_at": NOON,
                          "returned_at": NOON + timedelta(minutes=1), "message": "Value frozen"} | fields)


def alarms(caller, **query):
    return caller.get(ALARMS, **query).json()["alarms"]


def test_an_alarm_has_the_fields_of_the_contract(lab):
    made = make_alarm(lab.tap, lab.experiment, kind=AlarmKind.LIMIT, quantity="er_db", value=17.2, limit_value=20.0,
                      returned_at=None, message="ER below 20 dB")
    said, = alarms(lab.guest)
    assert said.keys() >= FIELDS
    assert (said["id"], said["experiment"], said["tap"]) == (made.pk, lab.experiment.pk, "bench-a/in")
    assert (said["value"], said["limit"], said["state"], said["level"]) == (17.2, 20.0, "unacknowledged", "alarm")
    assert said["raised_at"] == "2031-03-04T12:00:00.000000Z" and said["returned_at"] is None and said["cause"] is None


def test_alarms_by_state_and_experiment(lab):
    other = make_experiment(lab.tap)
    one = make_alarm(lab.tap, lab.experiment)
    two = make_alarm(lab.tap, other, returned_at=None, acknowledged_at=NOON)
    assert [row["id"] for row in alarms(lab.manager, state="acknowledged")] == [two.pk]
    assert [row["id"] for row in alarms(lab.manager, experiment=lab.experiment.pk)] == [one.pk]
    assert alarms(lab.manager, state="shelved") == []


def test_a_long_list_is_read_on_by_before(lab):
    made = [make_alarm(lab.tap, raised_at=NOON + timedelta(seconds=raised_s)).pk for raised_s in (3, 1, 4, 1, 5)]
    made = [made[place] for place in (1, 3, 0, 2, 4)]
    first = lab.manager.get(ALARMS, count=3).json()
    rest = lab.manager.get(ALARMS, count=3, before=first["before"]).json()
    assert [row["id"] for row in first["alarms"] + rest["alarms"]] == made[::-1] and rest["before"] is None


def test_a_guest_sees_alarms_of_named_benches_only(lab):
    make_alarm(lab.hidden)
    seen = make_alarm(lab.tap)
    assert [row["id"] for row in alarms(lab.guest)] == [seen.pk] and len(alarms(lab.researcher)) == 2


@pytest.mark.parametrize(("role", "status"), [
    ("manager", 200), ("owner", 200), ("researcher", 200), ("guest", 403), ("nobody", 401)])
def test_who_acknowledges(lab, role, status):
    made = make_alarm(lab.tap, returned_at=None)
    answer = getattr(lab, role).post(f"{ALARMS}/{made.pk}/acknowledge", {"note": "on my way"})
    assert answer.status_code == status
    made.refresh_from_db()
    assert made.state == ("acknowledged" if status == 200 else "unacknowledged")
    if status == 200:
        said = answer.json()
        assert (said["state"], said["acknowledged_by"], said["note"]) == ("acknowledged", role, "on my way")
        assert AuditEntry.objects.filter(person=lab.people[role]).count() == 1


def test_the_body_may_be_empty_and_a_second_time_changes_nothing(lab):
    made = make_alarm(lab.tap, returned_at=None)
    address = f"{ALARMS}/{made.pk}/acknowledge"
    first = lab.manager.post(address).json()
    assert lab.researcher.post(address, {"note": "me too"}).json() == first


def test_a_hidden_or_missing_alarm_is_404(lab):
    hidden = make_alarm(lab.hidden)
    assert lab.guest.post(f"{ALARMS}/{hidden.pk}/acknowledge").status_code == 404
    assert lab.manager.post(f"{ALARMS}/999999999999999999/acknowledge").status_code == 404


@pytest.mark.parametrize(("query", "field"), [
    ({"state": "open"}, "state"), ({"experiment": "x"}, "experiment"), ({"experiment": "9" * 30}, "experiment"),
    ({"count": "0"}, "count"), ({"count": "1001"}, "count"), ({"before": "-1"}, "before"), ({"limit": "3"}, "limit")])
def test_the_parameter_at_fault_is_named(lab, query, field):
    answer = lab.manager.get(ALARMS, **query)
    assert answer.status_code == 400 and answer.json()["field"] == field


def test_the_number_of_queries_does_not_grow_with_alarms(lab):
    def count():
        with CaptureQueriesContext(connection) as seen:
            alarms(lab.manager)
        return len(seen)

    make_alarm(lab.tap, lab.experiment)
    few = count()
    for _number in range(5):
        tap = make_tap()
        make_alarm(tap, make_experiment(tap), acknowledged_by=lab.people["owner"], acknowledged_at=NOON)
    assert count() == few
