from datetime import timedelta

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext
from django.utils import timezone

from labmon.audit.actions import note
from labmon.audit.models import AuditEntry
from labmon.audit.queries import AuditWish, audit_export, audit_rows, newest_id
from labmon.people.models import Role
from tests.factories import make_experiment, make_person, make_station, make_tap

pytestmark = pytest.mark.django_db


@pytest.fixture
def rows():
    """Ten entries about n1 and n2 by turns, by ann and by the command line by turns of two."""
    taps = [make_tap(make_station(name), "in") for name in ("n1", "n2")]
    ann = make_person(Role.OWNER, username="ann")
    return [note(ann if number // 2 % 2 else None, "set calibration" if number < 6 else "set floor", taps[number % 2])
            for number in range(10)]


def numbers(found, rows):
    return [rows.index(one) for one in found]


@pytest.mark.parametrize(("wish", "expected"), [
    ({}, [9, 8, 7, 6, 5, 4, 3, 2, 1, 0]),
    ({"bench": "n1"}, [8, 6, 4, 2, 0]),
    ({"person": "ann"}, [7, 6, 3, 2]),
    ({"action": "set floor"}, [9, 8, 7, 6]),
    ({"bench": "n2", "person": "ann", "action": "set calibration"}, [3]),
    ({"subject": "tap/n1/in"}, [8, 6, 4, 2, 0]),
    ({"bench": "nowhere"}, []),
    ({"from_at": timezone.now() + timedelta(days=1)}, []),
    ({"until_at": timezone.now() - timedelta(days=1)}, []),
    ({"from_at": timezone.now() - timedelta(days=1), "until_at": timezone.now() + timedelta(days=1), "bench": "n1"},
     [8, 6, 4, 2, 0]),
])
def test_narrowed(rows, wish, expected):
    assert numbers(audit_rows(make_person(), wish=AuditWish(**wish)), rows) == expected


def test_pages_lead_on_without_loss(rows):
    chief, found, before = make_person(), [], None
    while page := audit_rows(chief, wish=AuditWish(bench="n1"), before_id=before, limit=2):
        found += page
        before = page[-1].pk
    assert numbers(found, rows) == [8, 6, 4, 2, 0]
    assert numbers(audit_export(chief, AuditWish(), rows[4].pk), rows) == [4, 3, 2, 1, 0]
    assert newest_id() == rows[-1].pk


def test_an_owner_reads_what_is_about_their_benches_and_experiments():
    owner = make_person(Role.OWNER)
    own, foreign = make_tap(make_station("own", owner=owner), "in"), make_tap(make_station("foreign"), "in")
    experiment = make_experiment(foreign, owner=owner)
    seen = [note(None, "set calibration", own), note(None, "change experiment", experiment)]
    note(None, "set calibration", foreign)
    note(None, "add person", owner)
    assert audit_rows(owner) == seen[::-1]
    assert audit_rows(owner, wish=AuditWish(bench="own")) == seen[:1]
    assert audit_rows(owner, wish=AuditWish(bench="foreign")) == []
    for role in (Role.RESEARCHER, Role.GUEST):
        assert audit_rows(make_person(role)) == []


def plan_of(query: str, parameters) -> str:
    with connection.cursor() as cursor:
        cursor.execute(f"EXPLAIN {query}", parameters)
        return "\n".join(row[0] for row in cursor.fetchall())


@pytest.mark.parametrize("wish", [AuditWish(), AuditWish(bench="n1"), AuditWish(action="act 7"), AuditWish(person="bob")])
def test_a_page_walks_an_index_and_no_more_of_it_than_it_shows(rows, wish, settings):
    """With 20,000 entries the database plans no sort and no walk through the table, wherever in the audit the page lies."""
    with connection.cursor() as cursor:
        cursor.execute("INSERT INTO labmon_auditentry (at, person_name, action, subject, reason) SELECT now(), 'bob', "
                       "'act ' || n % 50, 'tap/n3/in', '' FROM generate_series(1, 20000) n")
        cursor.execute("INSERT INTO labmon_auditplace (entry_id, place) SELECT id, 'station/n' || id % 40 FROM labmon_auditentry "
                       "WHERE person_name = 'bob'")
        cursor.execute("ANALYZE labmon_auditentry")
        cursor.execute("ANALYZE labmon_auditplace")
    settings.DEBUG = True
    with CaptureQueriesContext(connection) as seen:
        audit_rows(make_person(), wish=wish, before_id=AuditEntry.objects.order_by("-pk")[10_000].pk, limit=20)
    selects = [one["sql"] for one in seen if one["sql"].startswith("SELECT") and "audit" in one["sql"] and "LIMIT" in one["sql"]
               and "OFFSET" not in one["sql"]]
    assert selects
    for sql in selects:
        plan = plan_of(sql, None)
        assert "Seq Scan" not in plan and "Sort" not in plan, plan
