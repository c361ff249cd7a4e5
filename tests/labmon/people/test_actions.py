import pytest
from django.contrib.auth.hashers import make_password
from django.utils import timezone

from labmon.audit.models import AuditEntry
from labmon.errors import WriteError
from labmon.people.actions import add_person, end_access, set_guest, set_password, set_role
from labmon.people.models import Person, Role
from tests.factories import make_person, make_station

pytestmark = pytest.mark.django_db


def test_added_person_is_written_down():
    chief = make_person()
    person = add_person("asha", "researcher", by=chief, password="a long enough one", email="asha@lab.example")
    assert person.check_password("a long enough one") and person.role == Role.RESEARCHER
    entry = AuditEntry.objects.get()
    assert (entry.person, entry.action, entry.subject, entry.after["role"]) == (chief, "add person", "person/asha", "researcher")


def test_person_without_password_cannot_sign_in():
    assert not add_person("asha", "researcher").has_usable_password()


@pytest.mark.parametrize(
    ("fields", "field"),
    [
        ({"name": "asha", "role": "king"}, "role"),
        ({"name": "a b", "role": "guest"}, "name"),
        ({"name": "", "role": "guest"}, "name"),
        ({"name": "x" * 151, "role": "guest"}, "name"),
        ({"name": "asha", "role": "guest", "password": "short"}, "password"),
        ({"name": "asha", "role": "guest", "email": "nowhere"}, "email"),
        ({"name": "taken", "role": "guest"}, "name"),
    ],
)
def test_what_cannot_be_meant_is_refused_by_field_and_leaves_nothing(fields, field):
    make_person(username="taken")
    with pytest.raises(WriteError) as refused:
        add_person(**fields)
    assert refused.value.field == field and refused.value.do
    assert Person.objects.count() == 1 and not AuditEntry.objects.exists()


def test_role_change_keeps_before_and_after():
    chief, person = make_person(), make_person(Role.RESEARCHER)
    set_role(person, "owner", by=chief, reason="took over the bench")
    entry = AuditEntry.objects.get()
    assert (entry.before, entry.after, entry.reason) == ({"role": "researcher"}, {"role": "owner"}, "took over the bench")
    set_role(person, "owner", by=chief)
    assert AuditEntry.objects.count() == 1


def test_last_manager_stays():
    chief = make_person()
    make_person(Role.MANAGER, is_active=False)
    with pytest.raises(WriteError, match="last manager"):
        set_role(chief, "owner", by=chief)
    with pytest.raises(WriteError, match="last manager"):
        end_access(chief, by=chief)
    make_person()
    assert end_access(chief, by=None).is_active is False


def test_ended_access_ends_sessions(client):
    make_person()
    leaver = add_person("leaver", "researcher", password="a long enough one")
    assert client.login(username="leaver", password="a long enough one")
    end_access(leaver, by=None)
    assert not client.login(username="leaver", password="a long enough one")
    leaver.refresh_from_db()
    assert not leaver.is_active and client.session.get("_auth_user_hash") != leaver.get_session_auth_hash()


def test_new_password_ends_old_sessions():
    person = add_person("asha", "owner", password="a long enough one")
    before = person.get_session_auth_hash()
    set_password(person, "another long one", by=person)
    person.refresh_from_db()
    assert person.get_session_auth_hash() != before


def test_guest_gets_benches_and_a_date():
    guest, bench = make_person(Role.GUEST), make_station("north-1")
    until = timezone.now()
    set_guest(guest, [bench], until, by=None)
    assert list(guest.guest_stations.all()) == [bench]
    assert AuditEntry.objects.get().after == {"guest_until": until.isoformat(), "guest_stations": ["north-1"]}


def test_passwords_are_kept_by_argon2_and_older_ones_made_anew_at_sign_in(client):
    """RFC 9106 (Argon2; from memory) id variant; the older hash is Django's PBKDF2."""
    assert add_person("asha", "owner", password="a long enough one").password.startswith("argon2$argon2id$")
    older = make_person(username="older", password=make_password("a long enough one", hasher="pbkdf2_sha256"))
    assert older.password.startswith("pbkdf2_sha256$")
    assert client.login(username="older", password="a long enough one")
    older.refresh_from_db()
    assert older.password.startswith("argon2$argon2id$")
