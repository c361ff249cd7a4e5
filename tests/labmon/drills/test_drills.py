"""A drill, from a false reading through the real door to a person; and a failing step, named."""

import json
from datetime import UTC, datetime, timedelta

import pytest
from django.test import Client
from django.utils import timezone

from ingest.models import Tap
from labmon.alarms.models import Alarm
from labmon.benches.queries import bench_rows
from labmon.drills import bench, follow
from labmon.drills.actions import begin_drill, begin_weekly_drill
from labmon.drills.models import Drill
from labmon.drills.queries import drill_rows
from labmon.errors import WriteError
from labmon.events.actions import set_call_rules, take_event
from labmon.events.models import Event, OnCall
from labmon.people.models import Role
from labmon.people.rights import experiments_visible_to, stations_visible_to, taps_visible_to
from labmon.pipeline.process import process_touched
from labmon.pipeline.silence import judge_silence
from labmon.tell.faults import SendFault
from labmon.tell.models import Delivery, Message
from labmon.tell.post import Answer
from labmon.tell.sending import send_waiting
from tests.factories import make_person, store_readings
from tests.labmon.events.lab import make_bench

pytestmark = pytest.mark.django_db


@pytest.fixture
def person():
    return make_person(Role.RESEARCHER, username="joren", email="joren@lab.example")


@pytest.fixture
def door(monkeypatch):
    """A door that stores what is posted; the true one, with worker and beat, is tried in tests/faults/test_drill.py."""
    posted = []

    def answer(url, body, headers, *, is_public_only):
        said = json.loads(body)
        posted.append((url, headers, said))
        ((name, columns),) = said["taps"].items()
        tap = Tap.objects.get(station__name=bench.STATION, name=name)
        arrival_us = [said["now"]["at"]] * len(columns["at"])
        raw = {name: columns[name] for name in ("port1", "port2")}
        store_readings(tap, columns["at"], boot=said["boot"], sequence=columns["sequence"], arrival_us=arrival_us, **raw)
        return Answer(200, "")

    monkeypatch.setattr(bench, "post", answer)
    return posted


def steps_of(drill):
    return {step.name: step.at for step in next(row for row in drill_rows() if row.id == drill.pk).steps}


def test_every_step_to_the_person_is_timed(person, door, mailoutbox):
    drill = begin_drill(person, by=None)
    follow.follow_drills()
    process_touched(now_us=int(timezone.now().timestamp() * 1e6) + 200_000)
    event = Event.objects.get()
    assert event.is_drill and event.next_step_at is None
    send_waiting()
    follow.follow_drills()
    assert steps_of(drill)["person"] is None and all(at for name, at in steps_of(drill).items() if name != "person")
    (mail,) = mailoutbox
    assert mail.to == ["joren@lab.example"] and mail.subject.startswith("Drill, nothing is wrong. alarm: labmon-drill/")
    assert "This is a drill" in mail.body and "/stations/" not in mail.body
    take_event(event.pk, by=person)
    later = timezone.now() + timedelta(seconds=15)
    assert follow.follow_drills() == [] and follow.follow_drills(later) == [drill.pk]
    drill.refresh_from_db()
    times = list(steps_of(drill).values())
    assert times == sorted(times) and drill.ended_at and not drill.failed_step
    process_touched(now_us=int(later.timestamp() * 1e6) + 20_000_000)
    assert Alarm.objects.get().returned_at, "good readings end the false drop"


@pytest.mark.parametrize(("after", "step"), [
    ("nothing", "door"), ("sent", "reduce"), ("judged", "channel"), ("handed", "person")])
def test_the_failing_step_is_named(person, door, monkeypatch, after, step):
    drill = begin_drill(person, by=None)
    if after == "nothing":
        def away(*given, **named):
            raise SendFault("ConnectionRefusedError: nobody there")

        monkeypatch.setattr(bench, "post", away)
    follow.follow_drills()
    if after in ("judged", "handed"):
        process_touched(now_us=int(timezone.now().timestamp() * 1e6) + 200_000)
    if after == "handed":
        send_waiting()
    follow.follow_drills(timezone.now() + timedelta(minutes=31))
    drill.refresh_from_db()
    assert (drill.failed_step, bool(drill.ended_at)) == (step, True) and drill.fault
    if after == "nothing":
        assert "nobody there" in drill.fault
    assert not Alarm.objects.filter(state="unacknowledged").exists(), "a drill that is over needs nobody"


def test_it_is_never_among_the_real_ones(person, door):
    make_bench("b1", person)
    begin_drill(person, by=None)
    follow.follow_drills()
    chief = make_person()
    assert [one.name for one in stations_visible_to(chief)] == ["b1"] == [row.station for row in bench_rows(chief)]
    assert taps_visible_to(chief).count() == experiments_visible_to(chief).count() == 1
    judge_silence(int(timezone.now().timestamp() * 1e6) + 3600 * 1_000_000)
    assert not Alarm.objects.filter(kind="no-reading").exists(), "its silence is no news"


def test_two_people_are_drilled_side_by_side_and_one_once_at_a_time(person, door):
    other = make_person(Role.OWNER, username="asha", email="asha@lab.example")
    for one in (person, other):
        begin_drill(one, by=None)
    with pytest.raises(WriteError):
        begin_drill(person, by=None)
    follow.follow_drills()
    process_touched(now_us=int(timezone.now().timestamp() * 1e6) + 200_000)
    assert sorted(Message.objects.values_list("person__username", flat=True)) == ["asha", "joren"]
    assert Delivery.objects.count() == 2 == Event.objects.filter(is_drill=True).count()


def test_weekly_at_its_hour_of_who_is_on_call_once(person):
    chief = make_person(email="chief@lab.example")
    tuesday = datetime(2031, 3, 4, 10, 15, tzinfo=UTC)
    assert begin_weekly_drill(tuesday) is None, "not switched on"
    set_call_rules(remind_after_s=900.0, drill_weekday=1, drill_hour=10, by=chief)
    assert begin_weekly_drill(tuesday + timedelta(hours=1)) is None is begin_weekly_drill(tuesday + timedelta(days=1))
    OnCall.objects.create(person=person, from_at=tuesday - timedelta(days=1), until_at=tuesday + timedelta(days=1))
    drill = begin_weekly_drill(tuesday)
    assert (drill.person, drill.week) == (person, "2031-W10") and begin_weekly_drill(tuesday + timedelta(minutes=5)) is None
    assert begin_weekly_drill(tuesday + timedelta(days=7)).person == chief
    assert Drill.objects.count() == 2


def test_the_page_says_which_step_failed(person):
    now = timezone.now()
    times = dict.fromkeys(("begun_at", "sent_at", "ended_at"), now)
    Drill.objects.create(person=person, person_name="joren", failed_step="door", fault="503", **times)
    client = Client()
    client.force_login(make_person())
    said = client.get("/drills/").content.decode()
    assert "failed at “door committed it”. 503" in said
    assert client.post("/drills/", {"person": "joren"}).status_code == 302 and Drill.objects.filter(ended_at=None).count() == 1
