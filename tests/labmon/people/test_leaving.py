from datetime import timedelta

import pytest
from django.utils import timezone

from labmon.audit.models import AuditEntry
from labmon.benches.models import Bench
from labmon.errors import WriteError
from labmon.events.models import OnCall
from labmon.experiments.actions import set_limit
from labmon.people.actions import end_access, set_password
from labmon.people.holdings import HoldingKind, holdings_of, may_take
from labmon.people.keys import make_person_key, person_of_key
from labmon.people.leaving import leave
from labmon.people.models import Person, Role
from labmon.runs.actions import plan_run
from labmon.runs.models import Run
from tests.factories import NOON, make_experiment, make_person, make_station, make_tap, store_alarm

pytestmark = pytest.mark.django_db
NOW = timezone.now().replace(microsecond=0)


@pytest.fixture
def chief():
    return make_person(username="maren")


@pytest.fixture
def leaver(chief):
    """An owner with a bench, an experiment with limit and alarm, two runs ahead (one over, one as deputy) and a time on call."""
    person = make_person(Role.OWNER, username="asha")
    tap = make_tap(make_station("n2", owner=person), "in")
    experiment = make_experiment(tap, owner=person, name="EOM input")
    set_limit(experiment, tap, "er_db", alarm=20.0, by=person)
    store_alarm(kind="untrusted", tap=tap, experiment=experiment, raised_at=NOON, message="frozen")
    other = make_experiment(tap, owner=chief, name="other")
    span = {"starts_at": NOW + timedelta(hours=1), "ends_at": NOW + timedelta(hours=9)}
    plan_run(experiment, by=person, name="night", **span)
    plan_run(other, by=chief, name="chief's", deputy=person, **span)
    plan_run(experiment, by=person, name="last week", starts_at=NOW - timedelta(days=7), ends_at=NOW - timedelta(days=6))
    OnCall.objects.create(person=person, from_at=NOW + timedelta(hours=2), until_at=NOW + timedelta(hours=10))
    OnCall.objects.create(person=person, from_at=NOW - timedelta(days=2), until_at=NOW - timedelta(days=1))
    return person


def test_what_hangs_on_someone(leaver):
    assert [(one.kind, one.name.split()[0], one.more.partition(" and")[0][:12]) for one in holdings_of(leaver)] == [
        ("bench", "n2", ""), ("experiment", "EOM", "with 1 limit"), ("run", "night", str(NOW + timedelta(hours=1))[:12]),
        ("deputy", "chief's", str(NOW + timedelta(hours=1))[:12]), ("on-call", str(NOW + timedelta(hours=2))[:10], "")]
    assert "1 open alarm" in holdings_of(leaver)[1].more


def test_cost_does_not_grow(leaver, django_assert_num_queries):
    for number in range(20):
        make_experiment(make_tap(make_station(owner=leaver)), owner=leaver, name=f"more {number}")
    with django_assert_num_queries(5):
        assert len(holdings_of(leaver)) == 45


def test_nobody_leaves_while_something_would_be_nobodys(leaver, chief):
    with pytest.raises(WriteError, match="bench n2"):
        end_access(leaver, by=chief)
    everything = {one.key: chief for one in holdings_of(leaver)}
    for missing in everything:
        with pytest.raises(WriteError, match="Nobody would have"):
            leave(leaver, {key: to for key, to in everything.items() if key != missing}, by=chief)
    leaver.refresh_from_db()
    assert leaver.is_active and len(holdings_of(leaver)) == 5


def test_all_is_passed_on_and_then_the_access_ends_at_once(leaver, chief, client):
    set_password(leaver, "a long enough one", by=None)
    assert client.login(username="asha", password="a long enough one") and client.get("/you/").status_code == 200
    key = make_person_key(leaver, by=None)[1]
    tobias = make_person(Role.RESEARCHER, username="tobias")
    to = {one.key: chief if one.kind in {HoldingKind.BENCH, HoldingKind.EXPERIMENT} else tobias for one in holdings_of(leaver)}
    leave(leaver, to, by=chief, reason="new post")
    assert client.get("/you/").status_code == 302 and person_of_key(key) is None
    assert Bench.objects.get(station__name="n2").owner == chief and holdings_of(leaver) == []
    assert {run.name: (run.owner, run.deputy) for run in Run.objects.all()} == {
        "night": (tobias, None), "chief's": (chief, tobias), "last week": (leaver, None)}
    assert OnCall.objects.filter(person=tobias).count() == 1 and OnCall.objects.filter(person=leaver).count() == 1
    said = list(AuditEntry.objects.order_by("pk").values_list("action", "reason"))[-6:]
    assert [action for action, _ in said] == [
        "set bench owner", "change experiment", "change run", "change run", "pass on duty", "end access"]
    assert said[0][1] == "asha leaves. new post" and said[-1][1] == "new post"


def test_whoever_takes_it_must_be_able_to(leaver, chief):
    everything = {one.key: chief for one in holdings_of(leaver)}
    bench = next(iter(everything))
    ended = make_person(Role.OWNER, is_active=False)
    for wrong in (leaver, make_person(Role.RESEARCHER), make_person(Role.GUEST), ended):
        with pytest.raises(WriteError, match="cannot take over"):
            leave(leaver, everything | {bench: wrong}, by=chief)
    assert Bench.objects.get(station__name="n2").owner == leaver
    assert may_take(make_person(Role.RESEARCHER), HoldingKind.RUN) and not may_take(make_person(Role.GUEST), HoldingKind.RUN)


def test_owner_and_deputy_in_one_person_is_not_planned(leaver, chief):
    """Where the deputy takes the run over, or the owner the deputy's place, one of the two stays empty."""
    run = Run.objects.get(name="night")
    tobias = make_person(Role.RESEARCHER, username="tobias")
    run.deputy = tobias
    run.save()
    leave(leaver, {one.key: tobias if one.kind == HoldingKind.RUN else chief for one in holdings_of(leaver)}, by=chief)
    run.refresh_from_db()
    assert (run.owner, run.deputy) == (tobias, None)
    assert Run.objects.get(name="chief's").deputy is None


def test_the_last_manager_stays(leaver, chief):
    with pytest.raises(WriteError, match="last manager"):
        leave(chief, {one.key: leaver for one in holdings_of(chief)}, by=chief)
    assert Person.objects.get(username="maren").is_active


def test_the_page_lists_refuses_and_does(leaver, chief, client):
    client.force_login(chief)
    address = f"/people/{leaver.pk}/end/"
    page = client.get(address).content.decode()
    assert "5 things of asha need someone" in page and "with 1 limit and 1 open alarm" in page and "Keys of the stations" in page
    keys = [one.key for one in holdings_of(leaver)]
    refused = client.post(address, {keys[0]: "maren", "reason": "new post"})
    assert refused.status_code == 422 and "Nobody would have" in refused.content.decode()
    assert "<option selected>maren" in refused.content.decode() and 'value="new post"' in refused.content.decode()
    assert client.post(address, {"all": "maren"}).status_code == 302
    leaver.refresh_from_db()
    assert not leaver.is_active and client.get(address).status_code == 404
