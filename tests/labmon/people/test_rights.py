"""Every action and every role, against the sentence of CONTRACT section 5 written out by hand."""

from datetime import timedelta

import pytest
from django.contrib.auth.models import AnonymousUser
from django.utils import timezone

from labmon.alarms.models import Alarm
from labmon.errors import NotAllowed
from labmon.experiments.models import Limit
from labmon.people.models import Role
from labmon.people.rights import (
    Action,
    alarms_visible_to,
    experiments_visible_to,
    may,
    require,
    stations_visible_to,
    taps_visible_to,
)
from tests.factories import NOON, make_experiment, make_person, make_run, make_station, make_tap

pytestmark = pytest.mark.django_db

YES, OWN, NO, NAMED = "yes", "own", "no", "named"
# guest, researcher, owner, manager; "own" = on own benches only, "named" = on benches named for the guest only
TABLE = {
    Action.READ: (NAMED, YES, YES, YES),
    Action.MAKE_OWN_KEY: (NAMED, YES, YES, YES),
    Action.ACKNOWLEDGE: (NO, YES, YES, YES),
    Action.SHELVE: (NO, YES, YES, YES),
    Action.TAKE_OUT: (NO, NO, OWN, YES),
    Action.LOG: (NO, YES, YES, YES),
    Action.PLAN_RUN: (NO, YES, YES, YES),
    Action.PLAN_FOR_OTHERS: (NO, NO, OWN, YES),
    Action.CHANGE_RUN: (NO, OWN, OWN, YES),
    Action.EXPORT: (NO, YES, YES, YES),
    Action.SET_SHARED: (NO, NO, OWN, YES),
    Action.SEE_CALLS: (NO, YES, YES, YES),
    Action.SET_CALLS: (NO, NO, NO, YES),
    Action.MAKE_EXPERIMENT: (NO, NO, OWN, YES),
    Action.SET_LIMIT: (NO, NO, OWN, YES),
    Action.CALIBRATE: (NO, NO, OWN, YES),
    Action.MAKE_STATION_KEY: (NO, NO, OWN, YES),
    Action.IMPORT_FILE: (NO, NO, OWN, YES),
    Action.READ_AUDIT: (NO, NO, OWN, YES),
    Action.ADD_STATION: (NO, NO, NO, YES),
    Action.ADD_TAP: (NO, NO, OWN, YES),
    Action.SET_FLOOR: (NO, NO, NO, YES),
    Action.SET_KEEPING: (NO, NO, NO, YES),
    Action.SEE_HEALTH: (NO, NO, NO, YES),
    Action.MANAGE_PEOPLE: (NO, NO, NO, YES),
}
ROLES = (Role.GUEST, Role.RESEARCHER, Role.OWNER, Role.MANAGER)


def make_subjects(owner):
    """A station with a tap, an experiment, a limit, an alarm and a run, all of them ``owner``'s."""
    station = make_station(owner=owner)
    tap = make_tap(station)
    experiment = make_experiment(tap, owner=owner)
    limit = Limit.objects.create(experiment=experiment, tap=tap, quantity="er_db")
    alarm = Alarm.objects.create(
        kind="limit", experiment=experiment, limit=limit, tap=tap, quantity="er_db", raised_at=NOON, message="low"
    )
    run = make_run(experiment, owner=owner)
    return {"station": station, "tap": tap, "experiment": experiment, "limit": limit, "alarm": alarm, "run": run}


def test_table_names_every_action():
    assert set(TABLE) == set(Action)


@pytest.mark.parametrize("action", Action)
@pytest.mark.parametrize("column", range(4), ids=ROLES)
@pytest.mark.parametrize("subject", ["station", "tap", "experiment", "limit", "alarm", "run"])
def test_every_action_of_every_role(action, column, subject):
    person = make_person(ROLES[column])
    own, foreign = make_subjects(person), make_subjects(make_person(Role.OWNER))
    if ROLES[column] is Role.GUEST:
        person.guest_stations.add(own["station"])
    on_own, on_foreign = {YES: (True, True), OWN: (True, False), NAMED: (True, False), NO: (False, False)}[TABLE[action][column]]
    assert may(person, action, own[subject]) is on_own
    assert may(person, action, foreign[subject]) is on_foreign


@pytest.mark.parametrize("role", ROLES)
@pytest.mark.parametrize("action", Action)
def test_nobody_may_anything_once_access_is_ended(role, action):
    person = make_person(role, is_active=False)
    assert not may(person, action, make_subjects(person)["station"])


def test_someone_not_signed_in_may_nothing():
    assert not any(may(AnonymousUser(), action) for action in Action)


def test_require_says_what_is_missing():
    with pytest.raises(NotAllowed, match="You may not set limits"):
        require(make_person(Role.RESEARCHER), Action.SET_LIMIT, make_tap())


def test_guest_sees_only_named_benches():
    guest, named, hidden = make_person(Role.GUEST), make_subjects(None), make_subjects(None)
    guest.guest_stations.add(named["station"])
    both = make_experiment(named["tap"], hidden["tap"])
    assert list(stations_visible_to(guest)) == [named["station"]]
    assert list(taps_visible_to(guest)) == [named["tap"]]
    assert list(experiments_visible_to(guest)) == [named["experiment"]]
    assert list(alarms_visible_to(guest)) == [named["alarm"]]
    assert not may(guest, Action.READ, both)


def test_guest_sees_nothing_after_their_date():
    guest = make_person(Role.GUEST, guest_until=timezone.now() - timedelta(seconds=1))
    named = make_subjects(None)
    guest.guest_stations.add(named["station"])
    assert not may(guest, Action.READ, named["station"])
    for seen in (stations_visible_to, taps_visible_to, experiments_visible_to, alarms_visible_to):
        assert not seen(guest).exists()


def test_others_see_every_bench():
    subjects = make_subjects(None)
    for role in ROLES[1:]:
        assert subjects["station"] in stations_visible_to(make_person(role))
