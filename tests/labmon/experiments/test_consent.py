"""A limit loosened during a declared run: refused to one person, granted by two; every step in the audit."""

from datetime import timedelta

import pytest
from django.db import IntegrityError, transaction

from labmon.audit.models import AuditEntry
from labmon.errors import NotAllowed, SecondPersonNeeded, WriteError
from labmon.experiments.actions import retire_limit, set_limit
from labmon.experiments.consent import ask_to_loosen, decide_request, expire_requests, waiting_requests, withdraw_request
from labmon.experiments.floors import set_floor
from labmon.experiments.models import LimitRequest, LimitVersion
from labmon.experiments.rules import LimitWish
from labmon.people.models import Role
from labmon.tell.models import Message
from tests.factories import NOON, make_experiment, make_person, make_run, make_tap

pytestmark = pytest.mark.django_db
HOUR = timedelta(hours=1)


@pytest.fixture
def clock(monkeypatch):
    now = {"at": NOON}
    monkeypatch.setattr("django.utils.timezone.now", lambda: now["at"])
    return lambda at: now.update(at=at)


@pytest.fixture
def night(clock):
    """A limit at 20 dB, and a run of an hour under way; the owner, and a manager with a mail address."""
    owner, manager = make_person(Role.OWNER), make_person(Role.MANAGER, email="m@example.org")
    tap = make_tap()
    experiment = make_experiment(tap, owner=owner)
    limit = set_limit(experiment, tap, "er_db", alarm=20.0, warning=23.0, by=owner).limit
    make_run(experiment, NOON)
    clock(NOON + HOUR / 2)
    return experiment, tap, limit, owner, manager


def last(limit):
    return limit.versions.order_by("-number").first()


def ask(night, **wish):
    experiment, tap, _, owner, _ = night
    return ask_to_loosen(experiment, tap, "er_db", LimitWish(**({"alarm": 17.0} | wish)), by=owner, reason="sample at stake")


def test_one_person_only_tightens_and_the_attempt_is_kept(night):
    experiment, tap, limit, owner, manager = night
    for person in (owner, manager):
        with pytest.raises(SecondPersonNeeded, match="may only be tightened"):
            set_limit(experiment, tap, "er_db", alarm=17.0, by=person, reason="it calls all night")
    with pytest.raises(SecondPersonNeeded):
        retire_limit(limit, by=owner)
    assert last(limit).alarm == 20.0
    entries = AuditEntry.objects.filter(action__startswith="limit not loosened").order_by("pk")
    assert [entry.person for entry in entries] == [owner, manager, owner]
    assert entries[0].subject == f"limit/{limit.pk}" and entries[0].after["alarm"] == 17.0
    assert entries[0].reason == "it calls all night"
    assert set_limit(experiment, tap, "er_db", alarm=21.0, warning=24.0, by=owner).alarm == 21.0


def test_a_second_person_consents_and_both_are_on_record(night):
    _, _, limit, owner, manager = night
    request = ask(night)
    assert last(limit).alarm == 20.0 and request.loosens == ["alarm", "warning"]
    assert Message.objects.get().recipients == ["m@example.org"]
    with pytest.raises(NotAllowed):
        decide_request(request.pk, by=owner, is_granted=True)
    decide_request(request.pk, by=manager, is_granted=True, note="seen")
    version = last(limit)
    assert (version.alarm, version.warning, version.set_by, version.consented_by) == (17.0, None, owner, manager)
    actions = list(AuditEntry.objects.order_by("pk").values_list("action", "person__username"))[-3:]
    assert actions == [("ask to loosen limit", owner.username), ("set limit", owner.username),
                       ("consent to looser limit", manager.username)]
    with pytest.raises(WriteError, match="granted"):
        decide_request(request.pk, by=manager, is_granted=True)


def test_refused_withdrawn_and_expired_change_nothing(night, clock):
    _, _, limit, owner, manager = night
    decide_request(ask(night).pk, by=manager, is_granted=False, note="no")
    second = ask(night)
    with pytest.raises(NotAllowed):
        withdraw_request(second.pk, by=manager)
    withdraw_request(second.pk, by=owner)
    third = ask(night)
    with pytest.raises(WriteError, match="waits already"):
        ask(night)
    clock(NOON + 2 * HOUR)
    with pytest.raises(WriteError, match="expired"):
        decide_request(third.pk, by=manager, is_granted=True)
    assert not waiting_requests().exists() and expire_requests() == 1 and expire_requests() == 0
    assert list(LimitRequest.objects.order_by("pk").values_list("state", flat=True)) == ["refused", "withdrawn", "expired"]
    assert LimitVersion.objects.filter(limit=limit).count() == 1
    assert AuditEntry.objects.order_by("-pk").first().action == "request for looser limit expired"


def test_a_request_to_retire(night):
    experiment, tap, limit, owner, manager = night
    request = ask_to_loosen(experiment, tap, "er_db", None, by=owner, reason="fibre is out")
    decide_request(request.pk, by=manager, is_granted=True)
    assert last(limit).is_retired and last(limit).consented_by == manager


def test_the_floor_holds_also_with_consent(night):
    _, tap, _, _, manager = night
    request = ask(night)
    set_floor(tap.station, "er_db", 18.0, by=manager, reason="x")
    with pytest.raises(WriteError, match="floor"):
        decide_request(request.pk, by=manager, is_granted=True)
    with pytest.raises(WriteError, match="floor"):
        ask(night, alarm=17.5)


def test_consent_to_what_has_changed_meanwhile_is_refused(night):
    experiment, tap, _, owner, manager = night
    request = ask(night)
    set_limit(experiment, tap, "er_db", alarm=22.0, warning=24.0, by=owner)
    with pytest.raises(WriteError, match="changed since"):
        decide_request(request.pk, by=manager, is_granted=True)


def test_nobody_is_asked_where_nobody_is_needed(night, clock):
    with pytest.raises(WriteError, match="only tightens"):
        ask(night, alarm=22.0, warning=25.0)
    clock(NOON + 2 * HOUR)
    with pytest.raises(WriteError, match="No run"):
        ask(night)


def test_the_database_refuses_a_request_granted_by_who_asked(night):
    request = ask(night)
    with pytest.raises(IntegrityError), transaction.atomic():
        LimitRequest.objects.filter(pk=request.pk).update(state="granted", decided_by=request.asked_by)
