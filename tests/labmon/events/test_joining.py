"""One event: what begins together and shares something; also with several workers at once, and done twice."""

from concurrent.futures import ThreadPoolExecutor
from datetime import timedelta
from threading import Barrier

import pytest
from django.db import connection, transaction
from django.db.models import F
from django.utils import timezone

from labmon.alarms.models import Alarm
from labmon.events.joining import GATHER
from labmon.events.models import Event
from labmon.events.telling import tell_due
from labmon.people.models import Role
from labmon.tell.models import Message
from tests.factories import make_person
from tests.labmon.events.lab import call, make_alarm, make_bench, told

pytestmark = pytest.mark.django_db


@pytest.fixture
def owner():
    return make_person(Role.OWNER, email="owner@lab.example")


def test_an_outage_of_forty_benches_is_one_call_and_names_the_network(owner):
    taps = [make_bench(f"b{number}", owner, network="lab-net", room=f"room {number % 2}") for number in range(40)]
    for first in range(0, 40, 8):
        call(*(make_alarm(tap) for tap in taps[first:first + 8]))
    assert not Message.objects.exists(), "the call waits for the others"
    assert tell_due(timezone.now() + GATHER) == 1
    message = Message.objects.get()
    assert message.person == owner
    assert message.subject.startswith("alarm: 40 benches on network lab-net sent their last readings together")
    assert Event.objects.get().alarms.count() == 40


def test_a_bench_that_shares_nothing_calls_at_once(owner):
    call(make_alarm(make_bench("b1", owner)))
    assert told() == [(owner.username, "call")] and Event.objects.get().due_at is None


@pytest.mark.parametrize(("after_s", "events"), [(29, 1), (31, 2), (-29, 1), (-31, 2)])
def test_thirty_seconds(owner, after_s, events):
    one, other = (make_bench(name, owner, laser="Beacon") for name in ("b1", "b2"))
    call(make_alarm(one, kind="limit"))
    call(make_alarm(other, after_s, kind="limit"))
    assert Event.objects.count() == events


def test_benches_that_share_nothing_and_silence_beside_light_are_events_of_their_own(owner):
    taps = [make_bench("b1", owner, laser="Beacon"), make_bench("b2", owner, laser="Lantern"), make_bench("b3", owner)]
    call(*(make_alarm(tap, kind="limit") for tap in taps), make_alarm(taps[0]))
    assert Event.objects.count() == 4


def test_two_limits_of_one_bench_are_one_event(owner):
    tap = make_bench("b1", owner)
    call(make_alarm(tap, kind="limit"), make_alarm(tap, 2.0, kind="limit"))
    assert Event.objects.count() == 1 == Message.objects.count()
    assert Message.objects.get().subject.endswith("(and 1 more of this bench)")


def test_what_only_a_chain_of_others_connects_stays_apart(owner):
    """b1 and b2 share a room, b2 and b3 a laser: no one thing explains all three."""
    taps = [
        make_bench("b1", owner, room="North Hall"),
        make_bench("b2", owner, room="North Hall", laser="Beacon"),
        make_bench("b3", owner, laser="Beacon"),
    ]
    call(*(make_alarm(tap, number, kind="limit") for number, tap in enumerate(taps)))
    assert sorted(event.alarms.count() for event in Event.objects.all()) == [1, 2]


def test_a_late_joiner_of_a_told_event_calls_nobody_who_was_told(owner):
    other = make_person(Role.OWNER, email="other@lab.example")
    taps = [make_bench("b1", owner, network="n"), make_bench("b2", owner, network="n"), make_bench("b3", other, network="n")]
    now = timezone.now()
    call(make_alarm(taps[0]))
    tell_due(now + 2 * GATHER)
    call(make_alarm(taps[1], 5.0))
    assert tell_due(now + 3 * GATHER) == 0 and told() == [(owner.username, "call")]
    call(make_alarm(taps[2], 6.0))
    tell_due(now + 4 * GATHER)
    assert told() == [(owner.username, "call"), (other.username, "call")]
    assert Message.objects.last().subject.endswith("; yours: b3") and "b1" not in Message.objects.last().body


def test_calling_twice_and_telling_twice_tells_once(owner):
    alarm = make_alarm(make_bench("b1", owner))
    for _ in range(3):
        call(alarm)
        tell_due()
    assert told() == [(owner.username, "call")]


@pytest.mark.django_db(transaction=True)
def test_eight_workers_that_find_one_outage_make_one_event_and_one_message(owner):
    alarms = [make_alarm(make_bench(f"b{number}", owner, network="n")) for number in range(24)]
    gate = Barrier(8, timeout=30)

    def work(number):
        gate.wait()
        with transaction.atomic():
            own = list(Alarm.objects.select_for_update(of=("self",)).filter(pk__in=[one.pk for one in alarms[number::8]]))
            call(*own)
        tell_due(timezone.now() + timedelta(minutes=1))
        connection.close()

    with ThreadPoolExecutor(8) as pool:
        list(pool.map(work, range(8)))
    assert Event.objects.count() == 1 and Event.objects.get().alarms.count() == 24
    assert told() == [(owner.username, "call")]


def test_a_fixed_number_of_queries(owner, django_assert_max_num_queries):
    """Writes apart, the same for 2 and for 40 alarms."""
    for count, network in ((2, "m"), (40, "n")):
        alarms = [make_alarm(make_bench(f"{network}{number}", owner, network=network)) for number in range(count)]
        with django_assert_max_num_queries(20):
            call(*alarms)
        Event.objects.update(due_at=F("began_at"))
        with django_assert_max_num_queries(26):
            tell_due()
