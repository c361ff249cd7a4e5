"""The word of planned runs as their start nears, and the call when it falls."""

from datetime import timedelta

import pytest

from analysis.outlook.verdict import Verdict
from ingest.times import at_of
from labmon.alarms.states import state_of
from labmon.clearance import watch
from labmon.clearance.models import RunClearance, RunWatch
from labmon.clearance.watch import look_at_run, look_at_runs
from labmon.people.models import Role
from labmon.runs.models import Run
from labmon.tell.models import Message
from tests.factories import make_person, store_alarm
from tests.labmon.clearance.bench import DAY_US, HOUR_US, MONDAY_US, bench_with, nights_of

pytestmark = pytest.mark.django_db


def planned(experiment, start_us, owner):
    run = Run.objects.create(experiment=experiment, owner=owner, name="night run", starts_at=at_of(start_us),
                             ends_at=at_of(start_us) + timedelta(hours=12))
    run.taps.set(experiment.taps.all())
    return run


@pytest.fixture
def owner(db):
    return make_person(Role.RESEARCHER, email="tobias@example.org")


def test_a_fall_calls_the_owner_once_and_a_second_fall_again(owner):
    """Cleared at 17:00; an alarm opens: not cleared, called; still open: nothing; gone, seen twice; open again: called again."""
    experiment, tap, now_us = bench_with(nights_of(19), owner=owner)
    run = planned(experiment, MONDAY_US + 18 * DAY_US, owner)
    at = at_of(MONDAY_US + 18 * DAY_US - 3 * HOUR_US)
    assert look_at_run(run.pk, at) and RunWatch.objects.get().standing == Verdict.CLEARED and not Message.objects.exists()
    alarm = store_alarm(kind="untrusted", tap=tap, raised_at=at + timedelta(minutes=5), cause="laser hops", message="Not trusted")
    for minute in (10, 20, 30):
        look_at_run(run.pk, at + timedelta(minutes=minute))
    message = Message.objects.get()
    assert message.person == owner and message.kind == "call" and message.recipients == ["tobias@example.org"]
    assert message.subject.startswith("Clearance fell before night run: Not cleared: something is still open")
    assert "Before, it was: cleared." in message.body and f"/runs/{run.pk}/" in message.body
    alarm.returned_at = at + timedelta(minutes=35)
    alarm.state = state_of(alarm)
    alarm.save()
    look_at_run(run.pk, at + timedelta(minutes=40))
    assert RunWatch.objects.get().standing == Verdict.NOT_CLEARED            # seen once only
    look_at_run(run.pk, at + timedelta(minutes=50))
    assert RunWatch.objects.get().standing == Verdict.CLEARED
    store_alarm(kind="no-reading", tap=tap, raised_at=at + timedelta(minutes=55), message="No reading")
    look_at_run(run.pk, at + timedelta(minutes=60))
    assert Message.objects.count() == 2 and RunWatch.objects.get().falls == 2
    rows = list(RunClearance.objects.order_by("made_at").values_list("verdict", "is_fall"))
    assert rows == [("cleared", False), ("not cleared", True), ("cleared", False), ("not cleared", True)]


def test_a_word_that_flickers_calls_once(owner):
    experiment, tap, now_us = bench_with(nights_of(19), owner=owner)
    run = planned(experiment, MONDAY_US + 18 * DAY_US, owner)
    at = at_of(MONDAY_US + 18 * DAY_US - 3 * HOUR_US)
    look_at_run(run.pk, at)
    for minute in range(10, 100, 20):
        store_alarm(kind="untrusted", tap=tap, raised_at=at + timedelta(minutes=minute - 1),
                    returned_at=at + timedelta(minutes=minute + 1), message="Not trusted")
        look_at_run(run.pk, at + timedelta(minutes=minute))
        look_at_run(run.pk, at + timedelta(minutes=minute + 10))
    assert Message.objects.count() == 1


def test_what_began_badly_is_no_fall(owner):
    experiment, _, _ = bench_with(nights_of(5), owner=owner)
    run = planned(experiment, MONDAY_US + 4 * DAY_US, owner)
    look_at_run(run.pk, at_of(MONDAY_US + 4 * DAY_US - 2 * HOUR_US))
    assert RunWatch.objects.get().standing == Verdict.NOT_ENOUGH and not Message.objects.exists()


def test_who_is_called_where_the_owner_cannot_be(owner):
    experiment, tap, _ = bench_with(nights_of(19))
    manager = make_person(Role.MANAGER, email="maren@example.org")
    run = planned(experiment, MONDAY_US + 18 * DAY_US, make_person(Role.RESEARCHER))
    at = at_of(MONDAY_US + 18 * DAY_US - 3 * HOUR_US)
    look_at_run(run.pk, at)
    store_alarm(kind="untrusted", tap=tap, raised_at=at + timedelta(minutes=5), message="Not trusted")
    look_at_run(run.pk, at + timedelta(minutes=10))
    assert [message.person for message in Message.objects.all()] == [manager]


def test_looks_grow_denser_towards_the_start(monkeypatch, owner):
    """30 h before: not yet; 24 to 6 h before: hourly; 6 to 1 h: each 15 min; then each 5 min; not after the start."""
    experiment, _, _ = bench_with(nights_of(1), owner=owner)
    start_us = MONDAY_US + 20 * DAY_US
    run = planned(experiment, start_us, owner)
    looked = []

    def look(run_id, now):
        looked.append((at_of(start_us) - now).total_seconds() / 60)
        RunWatch.objects.update_or_create(run_id=run_id, defaults={"looked_at": now, "standing": "cleared"})
        return True

    monkeypatch.setattr(watch, "look_at_run", look)
    for minute in range(30 * 60, -20, -5):
        look_at_runs(at_of(start_us) - timedelta(minutes=minute))
    assert looked[0] == 1440 and looked[-1] == 5
    steps = [before - after for before, after in zip(looked, looked[1:], strict=False)]
    assert set(steps) == {60, 15, 5} and steps == sorted(steps, reverse=True)
    Run.objects.filter(pk=run.pk).update(cancelled_at=at_of(start_us))
    looked.clear()
    look_at_runs(at_of(start_us) - timedelta(hours=2))
    assert looked == []


def test_nothing_is_kept_where_nothing_changed(owner):
    experiment, _, _ = bench_with(nights_of(19), owner=owner)
    run = planned(experiment, MONDAY_US + 18 * DAY_US, owner)
    for minute in (0, 5, 10):
        look_at_run(run.pk, at_of(MONDAY_US + 18 * DAY_US - HOUR_US) + timedelta(minutes=minute))
    assert RunClearance.objects.count() == 1
