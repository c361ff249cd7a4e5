"""Open pages share one look at the benches, but never an old one."""

import pytest

from labmon.live.changes import changes
from labmon.people.models import Role
from labmon.screen import snapshot as module
from labmon.screen.snapshot import snapshot
from tests.factories import make_person, make_station

pytestmark = pytest.mark.django_db


@pytest.fixture
def looks(monkeypatch):
    """Who asked the database."""
    asked = []
    true_rows = module.bench_rows
    monkeypatch.setattr(module, "bench_rows", lambda person: asked.append(person) or true_rows(person))
    return asked


def test_two_people_share_a_look(looks):
    make_station("n2")
    one, other = make_person(Role.RESEARCHER), make_person(Role.MANAGER)
    assert [row.station for row in snapshot.rows_for(one)] == [row.station for row in snapshot.rows_for(other)] == ["n2"]
    assert looks == [one]


def test_a_guest_never_sees_the_shared_look(looks):
    make_station("n2")
    guest = make_person(Role.GUEST)
    snapshot.rows_for(make_person(Role.MANAGER))
    assert snapshot.rows_for(guest) == []


@pytest.mark.parametrize(("kind", "count"), [("alarm", 2), ("limits", 2), ("tap", 1)])
def test_an_alarm_makes_a_new_look_at_once(looks, kind, count):
    person = make_person(Role.MANAGER)
    snapshot.rows_for(person)
    changes.note(kind)
    snapshot.rows_for(person)
    assert len(looks) == count


def test_an_old_look_is_made_anew(looks, monkeypatch):
    person = make_person(Role.MANAGER)
    snapshot.rows_for(person)
    monkeypatch.setattr(module, "KEPT_S", -1.0)
    snapshot.rows_for(person)
    assert len(looks) == 2
