from datetime import timedelta

import pytest
from django.utils import timezone

from labmon.audit.models import AuditEntry
from labmon.errors import WriteError
from labmon.people.actions import end_access
from labmon.people.keys import make_person_key, person_of_key, revoke_person_key
from labmon.people.models import PersonKey, Role
from tests.factories import make_person

pytestmark = pytest.mark.django_db


def test_key_opens_and_is_not_kept():
    person = make_person()
    row, key = make_person_key(person, by=person)
    assert person_of_key(key) == person
    kept = PersonKey.objects.get()
    assert key.encode() not in bytes(kept.digest) and key not in str(AuditEntry.objects.values_list())
    assert len(bytes(kept.digest)) == 32 and key.endswith(row.hint)


def test_two_keys_differ():
    person = make_person()
    assert make_person_key(person, by=person)[1] != make_person_key(person, by=person)[1]


@pytest.mark.parametrize("key", ["", "person-", "person-wrong", "x" * 5000])
def test_unknown_key_is_nobody(key):
    assert person_of_key(key) is None


def test_revoked_key_is_dead_at_once_and_revoking_twice_is_one_audit_row():
    person = make_person()
    row, key = make_person_key(person, by=person)
    revoke_person_key(row.pk, by=person)
    revoke_person_key(row.pk, by=person)
    assert person_of_key(key) is None
    assert AuditEntry.objects.filter(action="revoke person key").count() == 1


def test_key_dies_with_its_date():
    person = make_person()
    assert person_of_key(make_person_key(person, by=person, expires_at=timezone.now() - timedelta(seconds=1))[1]) is None
    assert person_of_key(make_person_key(person, by=person, expires_at=timezone.now() + timedelta(hours=1))[1]) == person


def test_key_dies_with_access():
    make_person()
    leaver = make_person(Role.RESEARCHER)
    _, key = make_person_key(leaver, by=leaver)
    end_access(leaver, by=None)
    assert person_of_key(key) is None


def test_guest_key_dies_with_the_guest_date():
    guest = make_person(Role.GUEST, guest_until=timezone.now() - timedelta(seconds=1))
    assert person_of_key(make_person_key(guest, by=None)[1]) is None


def test_a_key_is_good_for_what_it_says():
    person = make_person()
    row, _ = make_person_key(person, by=person, scope="read", purpose="night notebook")
    assert (row.scope, AuditEntry.objects.get().after["purpose"]) == ("read", "night notebook")
    assert make_person_key(person, by=person)[0].scope == "write"
    for wrong in ({"scope": "everything"}, {"purpose": "x" * 101}):
        with pytest.raises(WriteError):
            make_person_key(person, by=person, **wrong)
