import pytest
from django.db import DatabaseError, connection, transaction

from labmon.audit.actions import note
from labmon.audit.models import AuditEntry
from labmon.audit.queries import audit_rows
from labmon.people.models import Role
from tests.factories import make_person, make_station, make_tap


@pytest.mark.django_db
@pytest.mark.parametrize("statement", ["UPDATE labmon_auditentry SET reason = 'x'", "DELETE FROM labmon_auditentry"])
def test_database_refuses_to_change_the_audit(statement):
    note(None, "set limit", "limit/1")
    with pytest.raises(DatabaseError, match="append-only"), transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(statement)
    assert AuditEntry.objects.count() == 1


@pytest.mark.django_db(transaction=True)
def test_note_outside_a_transaction_is_a_fault_of_the_caller():
    with pytest.raises(RuntimeError, match="transaction"):
        note(None, "set limit", "limit/1")


@pytest.mark.django_db
def test_managers_read_all_owners_their_own_others_nothing():
    chief, owner, researcher = make_person(), make_person(Role.OWNER), make_person(Role.RESEARCHER)
    own, foreign = make_tap(make_station("own", owner=owner), "t"), make_tap(make_station("foreign"), "t")
    for tap in (own, foreign):
        note(chief, "set calibration", tap)
    note(chief, "add person", researcher)
    assert len(audit_rows(chief)) == 3
    assert [row.subject for row in audit_rows(owner)] == ["tap/own/t"]
    assert audit_rows(researcher) == []
    assert [row.subject for row in audit_rows(chief, subject="tap/foreign/t")] == ["tap/foreign/t"]
    newest = audit_rows(chief, limit=1)[0]
    assert len(audit_rows(chief, before_id=newest.pk)) == 2


@pytest.mark.django_db
@pytest.mark.parametrize("statement", ["UPDATE labmon_auditplace SET place = 'x'", "DELETE FROM labmon_auditplace"])
def test_database_refuses_to_change_what_an_entry_is_about(statement):
    note(None, "set calibration", make_tap())
    with pytest.raises(DatabaseError, match="append-only"), transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(statement)
