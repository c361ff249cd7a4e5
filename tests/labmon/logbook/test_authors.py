import pytest
from django.utils import timezone

from labmon.logbook.actions import may_edit, write_entry
from labmon.logbook.authors import author_of, may_answer
from labmon.people.models import Role
from tests.factories import make_person, make_station

pytestmark = pytest.mark.django_db


def test_names_are_for_the_bench_owner_and_managers_roles_for_the_others():
    owner, writer = make_person(Role.OWNER), make_person(Role.RESEARCHER, username="tobias")
    entry = write_entry(make_station(owner=owner), by=writer, at=timezone.now(), text="x")
    guest = make_person(Role.GUEST)
    guest.guest_stations.add(entry.station)
    others = (make_person(Role.OWNER), make_person(Role.RESEARCHER), guest)
    said = [author_of(entry, one) for one in (writer, owner, make_person(), *others)]
    assert said == ["you", "tobias", "tobias", "a researcher", "a researcher", "a researcher"]


def test_what_the_page_offers_is_what_the_action_lets():
    owner, writer, guest = make_person(Role.OWNER), make_person(Role.RESEARCHER), make_person(Role.GUEST)
    entry = write_entry(make_station(owner=owner), by=writer, at=timezone.now(), text="x")
    guest.guest_stations.add(entry.station)
    for reader in (owner, writer, guest, make_person(), make_person(Role.OWNER), make_person(Role.RESEARCHER)):
        assert may_answer(entry, reader) is may_edit(reader, entry)
    writer.role = Role.GUEST
    writer.save()
    entry.refresh_from_db()
    assert not may_answer(entry, writer) and not may_edit(writer, entry)
