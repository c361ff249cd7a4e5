"""An alarm's life against the real database: readings, late data, people, the beat and repeated tasks in any order, and side
by side. No order leads to a state that the facts, the holds and the told history do not give."""

from concurrent.futures import ThreadPoolExecutor
from datetime import timedelta
from threading import Barrier

import numpy as np
import pytest
from django.db import connections, transaction
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule, run_state_machine_as_test

from ingest.models import Touch
from labmon.alarms.actions import acknowledge_alarm
from labmon.alarms.holding import Held, end_due_holds, end_hold, shelve, take_out_of_service, unshelve_alarm
from labmon.alarms.holds import StandingHolds
from labmon.alarms.models import Alarm, AlarmHold, HoldKind
from labmon.alarms.states import state_of
from labmon.audit.models import AuditEntry
from labmon.experiments.actions import set_limit
from labmon.people.models import Role
from labmon.pipeline.process import process_touched
from labmon.tell.models import Message
from tests.factories import NOON, NOON_US, make_experiment, make_person, make_tap, store_alarm, store_readings
from tests.labmon.pipeline.lab import S, ports_of

GOOD_DB, WARN_DB, BAD_DB = 30.0, 22.0, 18.0


class Clock:
    """The server's clock, which the test moves; it starts when the first reading is taken."""

    now = NOON


@pytest.fixture(autouse=True)
def clock(monkeypatch):
    Clock.now = NOON
    monkeypatch.setattr("django.utils.timezone.now", lambda: Clock.now)


def check_life() -> None:
    """What must hold at every moment."""
    alarms = list(Alarm.objects.order_by("pk"))
    for alarm in alarms:
        assert alarm.state == state_of(alarm)
    still_open = [alarm for alarm in alarms if alarm.returned_at is None and not alarm.is_withdrawn]
    assert len({(alarm.kind, alarm.limit_id, alarm.tap_id) for alarm in still_open}) == len(still_open)
    standing = StandingHolds.of({alarm.tap_id for alarm in still_open})
    for alarm in still_open:
        before = (alarm.shelved_until, alarm.is_out_of_service)
        standing.mark(alarm)
        assert before == (alarm.shelved_until, alarm.is_out_of_service), "an open alarm shows what holds it, no more and no less"
    for hold in AlarmHold.objects.all():
        assert hold.kind != HoldKind.SHELVED or hold.until - hold.begun_at <= timedelta(hours=4)
    events = list(Message.objects.values_list("key", flat=True))
    assert len(events) == len(set(events))
    ended = AlarmHold.objects.exclude(ended_at=None).count()
    told = AuditEntry.objects.filter(action__in=["unshelve", "put back into service"]).count()
    replaced = AuditEntry.objects.filter(action__in=["shelve", "take out of service"]).exclude(before=None).count()
    assert ended == told + replaced, "each end is told once"


class Life(RuleBasedStateMachine):
    """One tap with one limit (warning 23 dB, alarm 20 dB, delays 3 s); time moves with the readings."""

    def __init__(self):
        super().__init__()
        self.block = transaction.atomic()
        self.block.__enter__()
        Clock.now = NOON
        self.sent, self.late, self.told = 0, [], {}

    @initialize()
    def bench(self):
        self.people = [make_person(Role.OWNER, email="owner@lab.example"), make_person(Role.RESEARCHER)]
        self.tap = make_tap()
        experiment = make_experiment(self.tap, owner=self.people[0])
        delays = {"on_delay_s": 3.0, "off_delay_s": 3.0, "deadband": 1.0}
        since, owner = NOON - timedelta(hours=1), self.people[0]
        self.limit = set_limit(
            experiment, self.tap, "er_db", alarm=20.0, warning=23.0, valid_from=since, by=owner, **delays
        ).limit

    def teardown(self):
        transaction.set_rollback(True)
        self.block.__exit__(None, None, None)

    def _store(self, first, er_db):
        index = first + np.arange(len(er_db))
        at_us = NOON_US + index * S
        arrival_us = np.full(len(er_db), self._now_us())
        store_readings(self.tap, at_us, arrival_us=arrival_us, sequence=index, boot="b", **ports_of(er_db))

    def _now_us(self):
        return int((Clock.now - NOON).total_seconds() * S) + NOON_US

    def _move(self, to_s):
        Clock.now = max(Clock.now, NOON + timedelta(seconds=to_s))

    @rule(er_db=st.sampled_from([GOOD_DB, WARN_DB, BAD_DB]), count=st.integers(1, 8))
    def light(self, er_db, count):
        self._move(self.sent + count)
        self._store(self.sent, np.full(count, er_db))
        self.sent += count

    @rule(er_db=st.sampled_from([GOOD_DB, WARN_DB, BAD_DB]), count=st.integers(1, 8))
    def held_back(self, er_db, count):
        self.late.append((self.sent, np.full(count, er_db)))
        self.sent += count
        self._move(self.sent)

    @precondition(lambda self: self.late)
    @rule(newest_first=st.booleans())
    def late_data(self, newest_first):
        self._store(*self.late.pop(-1 if newest_first else 0))

    @rule(times=st.integers(1, 3))
    def judge(self, times):
        for _ in range(times):
            process_touched(now_us=self._now_us() + 100_000)

    @rule()
    def judge_all_again(self):
        Touch.objects.create(tap=self.tap, first_at_us=NOON_US, last_at_us=NOON_US + self.sent * S, arrival_us=self._now_us())
        process_touched(now_us=self._now_us() + 100_000)

    @rule(person=st.integers(0, 1))
    def acknowledge(self, person):
        for alarm in Alarm.objects.all():
            before = alarm.acknowledged_by_id if alarm.acknowledged_at else None
            taken = acknowledge_alarm(alarm.pk, by=self.people[person])
            assert taken.acknowledged_by_id == (before or self.people[person].pk), "the first stays"

    @rule(for_s=st.sampled_from([5.0, 60.0, 14_400.0]), person=st.integers(0, 1), whole_tap=st.booleans())
    def shelve(self, for_s, person, whole_tap):
        shelve(Held(self.tap) if whole_tap else Held.of_limit(self.limit), by=self.people[person], for_s=for_s, reason="work")

    @rule()
    def unshelve(self):
        for alarm in Alarm.objects.select_related("tap__station", "limit"):
            unshelve_alarm(alarm, by=self.people[1])
            assert unshelve_alarm(alarm, by=self.people[0]) == []

    @rule(whole_tap=st.booleans())
    def take_out(self, whole_tap):
        take_out_of_service(Held(self.tap) if whole_tap else Held.of_limit(self.limit), by=self.people[0], reason="repair")

    @rule()
    def put_back(self):
        for hold in AlarmHold.objects.filter(kind=HoldKind.OUT_OF_SERVICE):
            end_hold(hold.pk, by=self.people[0])

    @rule(later_s=st.sampled_from([0, 4, 61, 15_000]))
    def beat(self, later_s):
        Clock.now += timedelta(seconds=later_s)
        end_due_holds(Clock.now)
        assert end_due_holds(Clock.now) == []
        assert not AlarmHold.objects.filter(ended_at=None, until__lte=Clock.now).exists()

    @invariant()
    def life_is_possible(self):
        check_life()
        now = dict(Alarm.objects.filter(is_late=False).values_list("pk", "raised_at"))
        assert self.told.keys() <= set(Alarm.objects.values_list("pk", flat=True)), "a told alarm is never deleted"
        self.told |= now

    @invariant()
    def nobody_is_called_while_out_of_service(self):
        if not hasattr(self, "mails"):
            self.mails = 0
        count = Message.objects.count()
        is_out = AlarmHold.objects.filter(ended_at=None, kind=HoldKind.OUT_OF_SERVICE, alarm_kind="").exists()
        assert not (is_out and getattr(self, "was_out", False)) or count == self.mails
        self.mails, self.was_out = count, is_out


@pytest.mark.django_db
def test_any_order_of_events_is_a_possible_life():
    run_state_machine_as_test(
        Life,
        settings=settings(
            max_examples=25, stateful_step_count=25, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck)
        ),
    )


ACTS = {
    "acknowledge": lambda alarm, person: acknowledge_alarm(alarm.pk, by=person),
    "shelve": lambda alarm, person: shelve(Held.of_alarm(alarm), by=person, for_s=60.0, reason="work"),
    "shelve the tap": lambda alarm, person: shelve(Held(alarm.tap), by=person, for_s=60.0, reason="work"),
    "unshelve": lambda alarm, person: unshelve_alarm(alarm, by=person),
    "take out": lambda alarm, person: take_out_of_service(Held(alarm.tap), by=person, reason="repair"),
    "beat": lambda alarm, person: end_due_holds(Clock.now + timedelta(hours=5)),
}


def at_once(acts, alarm, person):
    """Each act in a thread and on a connection of its own, all set off together."""
    barrier = Barrier(len(acts))

    def run(name):
        try:
            barrier.wait(timeout=30)
            ACTS[name](alarm, person)
        finally:
            connections.close_all()

    with ThreadPoolExecutor(len(acts)) as pool:
        for done in [pool.submit(run, name) for name in acts]:
            done.result(timeout=60)


@pytest.mark.django_db(transaction=True)
@settings(max_examples=25, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))
@given(acts=st.lists(st.sampled_from(sorted(ACTS)), min_size=2, max_size=6))
def test_acts_side_by_side_end_in_a_possible_state(acts):
    owner = make_person(Role.OWNER, email="owner@lab.example")
    tap = make_tap()
    experiment = make_experiment(tap, owner=owner)
    alarm = store_alarm(kind="untrusted", tap=tap, experiment=experiment, raised_at=NOON, message="frozen")
    at_once(acts, alarm, owner)
    check_life()
    alarm.refresh_from_db()
    assert (alarm.acknowledged_at is not None) == ("acknowledge" in acts)
    entries = AuditEntry.objects.filter(subject=f"alarm/{alarm.pk}", action="acknowledge alarm")
    assert entries.count() == min(acts.count("acknowledge"), 1)
    assert AlarmHold.objects.filter(tap=tap, ended_at=None).count() <= len({act for act in acts if act != "acknowledge"})
