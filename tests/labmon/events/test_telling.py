"""Who is told of an event, when, and of what."""

from datetime import timedelta

import pytest
from django.utils import timezone

from analysis.models import TapNow
from labmon.alarms.actions import acknowledge_alarm
from labmon.alarms.calls import ROSE
from labmon.alarms.models import Alarm
from labmon.events.actions import set_call_rules, take_event
from labmon.events.models import Event, OnCall
from labmon.events.steps import take_steps
from labmon.events.telling import tell_due
from labmon.people.models import Role
from labmon.tell.models import Delivery, Message, QuietHours, Webhook
from tests.factories import make_person, make_run
from tests.labmon.events.lab import call, make_alarm, make_bench, told

pytestmark = pytest.mark.django_db
MINUTE = timedelta(minutes=1)


@pytest.fixture
def people():
    """One of each duty; ``night`` has a run."""
    return {name: make_person(role, username=name, email=f"{name}@lab.example") for name, role in (
        ("owner", Role.OWNER), ("night", Role.RESEARCHER), ("deputy", Role.RESEARCHER), ("watch", Role.RESEARCHER),
        ("chief", Role.MANAGER), ("second", Role.MANAGER), ("bystander", Role.OWNER))}


def always_quiet(person):
    at = timezone.now() - timedelta(hours=1)
    minute = at.hour * 60 + at.minute
    QuietHours.objects.create(person=person, from_minute=minute, until_minute=(minute - 60) % 1440)


def on_call(person):
    now = timezone.now()
    return OnCall.objects.create(person=person, from_at=now - timedelta(hours=1), until_at=now + timedelta(hours=8))


def pass_time():
    Event.objects.update(next_step_at=timezone.now() - timedelta(seconds=1))
    take_steps()


def test_without_a_run_owner_then_on_call_then_managers(people):
    """CONTRACT 5: mail goes to the experiment's owner, then managers."""
    on_call(people["watch"])
    call(make_alarm(make_bench("b1", people["owner"])))
    assert told() == [("owner", "call")]
    pass_time()
    assert told()[1:] == [("watch", "passed-on"), ("owner", "reminder")]
    pass_time()
    assert told()[3:] == [("chief", "passed-on"), ("second", "passed-on")]
    pass_time()
    assert len(told()) == 5 and Event.objects.get().next_step_at is None, "the chain is at its end"
    passed = Message.objects.get(person=people["watch"])
    assert passed.subject.startswith("not taken: alarm: b1/out") and "owner (owner) at" in passed.body


def test_in_a_run_its_owner_its_deputy_on_call_owner_managers(people):
    tap = make_bench("b1", people["owner"])
    now = timezone.now()
    make_run(tap.experiments.get(), now - MINUTE, 3600, owner=people["night"], deputy=people["deputy"])
    on_call(people["watch"])
    for name in ("night", "deputy"):
        always_quiet(people[name])
    call(make_alarm(tap))
    for _ in range(5):
        pass_time()
    assert [name for name, kind in told() if kind != "reminder"] == ["night", "deputy", "watch", "owner", "chief", "second"]
    assert Message.objects.filter(kind="reminder").get().person == people["night"]
    assert {one.duty for one in Message.objects.all()} == {"run owner", "deputy", "on call", "owner", "manager"}


def test_quiet_hours_are_kept_outside_ones_own_runs(people):
    for name in ("owner", "chief"):
        always_quiet(people[name])
    call(make_alarm(make_bench("b1", people["owner"])))
    assert told() == [("second", "call")]


def test_where_all_sleep_the_first_is_told_on_waking(people):
    for name in ("owner", "chief", "second"):
        always_quiet(people[name])
    call(make_alarm(make_bench("b1", people["owner"])))
    assert told() == [("owner", "call")]
    assert Delivery.objects.get().next_try_at > timezone.now() + timedelta(hours=1)


def test_who_cannot_be_reached_is_passed_over_and_nobody_is_the_labs_mailbox(people, settings):
    people["owner"].is_active = False
    people["owner"].save()
    tap = make_bench("b1", people["owner"])
    call(make_alarm(tap))
    assert told() == [("chief", "call"), ("second", "call")]
    for name in ("chief", "second"):
        people[name].email = ""
        people[name].save()
    call(make_alarm(make_bench("b2", people["owner"])))
    assert Message.objects.last().recipients == [settings.DEFAULT_FROM_EMAIL]


def test_a_warning_is_told_once_and_again_only_as_it_rises(people):
    alarm = make_alarm(make_bench("b1", people["owner"]), kind="limit", level="warning")
    call(alarm)
    assert Event.objects.get().next_step_at is None, "a warning wakes nobody else"
    alarm.level = "alarm"
    alarm.save()
    for _ in range(2):
        call(alarm, why=ROSE)
    assert [one.level for one in Message.objects.order_by("pk")] == ["warning", "alarm"]


def test_what_was_taken_before_the_call_was_due_calls_nobody(people):
    alarm = make_alarm(make_bench("b1", people["owner"], network="n"))
    make_bench("b2", people["owner"], network="n")
    call(alarm)
    acknowledge_alarm(alarm.pk, by=people["watch"])
    tell_due(timezone.now() + MINUTE)
    assert told() == []


def test_taking_an_event_takes_all_its_alarms_and_the_others_hear_of_it(people):
    taps = [make_bench(f"b{number}", people[name], network="n") for number, name in enumerate(("owner", "bystander"))]
    call(*(make_alarm(tap) for tap in taps))
    tell_due(timezone.now() + MINUTE)
    assert sorted(told()) == [("bystander", "call"), ("owner", "call")]
    event = Event.objects.get()
    assert len(take_event(event.pk, by=people["owner"], note="switch is off")) == 2
    assert take_event(event.pk, by=people["chief"]) == [], "a second time changes nothing"
    event.refresh_from_db()
    assert (event.taken_by, event.next_step_at) == (people["owner"], None)
    assert {alarm.acknowledged_by for alarm in Alarm.objects.all()} == {people["owner"]}
    taken = Message.objects.filter(kind="taken").get()
    assert taken.person == people["bystander"] and taken.subject.startswith("Taken by owner: 2 benches")
    assert "switch is off" in taken.body
    pass_time()
    assert len(told()) == 3


def test_acknowledging_the_last_alarm_takes_the_event(people):
    tap = make_bench("b1", people["owner"])
    one, other = make_alarm(tap, kind="limit"), make_alarm(tap, 1.0, kind="limit")
    call(one, other)
    acknowledge_alarm(one.pk, by=people["chief"])
    assert Event.objects.get().taken_by is None
    acknowledge_alarm(other.pk, by=people["chief"])
    assert Event.objects.get().taken_by == people["chief"]
    assert told(kind="taken") == [("owner", "taken")]


def test_the_waiting_time_is_the_labs_own(people):
    set_call_rules(remind_after_s=300.0, drill_weekday=None, drill_hour=10, by=people["chief"])
    before = timezone.now()
    call(make_alarm(make_bench("b1", people["owner"])))
    assert 299 <= (Event.objects.get().next_step_at - before).total_seconds() <= 330
    assert "within 5 min" in Message.objects.get().body


def test_what_came_back_by_itself_wakes_nobody_else(people):
    alarm = make_alarm(make_bench("b1", people["owner"]))
    call(alarm)
    alarm.returned_at, alarm.state = timezone.now(), "returned-unacknowledged"
    alarm.save()
    pass_time()
    assert told() == [("owner", "call")] and Event.objects.get().next_step_at is None


def test_the_mail_has_value_with_error_margin_since_when_and_where_to_take_it(people, settings):
    settings.PUBLIC_URL = "https://lab.example"
    tap = make_bench("b08", people["owner"])
    alarm = make_alarm(tap, -60.0, kind="limit")
    alarm.cause = "laser mode hop"
    alarm.save()
    nothing = dict.fromkeys(("angle_deg", "polarized_er_db", "dop", "power_w", "azimuth_deg", "ellipticity_deg", "sop",
                             "temperature_c", "humidity_pct", "pressure_hpa"))
    flags = dict.fromkeys(("is_lower_bound", "is_upper_bound", "angle_is_upper_bound", "angle_is_lower_bound"), False)
    sample = nothing | flags | {"er_db": 18.7, "er_sigma_db": 0.23, "trust_by_quantity": {}, "last_trusted": {}}
    TapNow.objects.create(tap=tap, at_us=1_925_000_000_000_000, sample=sample)
    call(alarm)
    message = Message.objects.get()
    assert message.subject == "alarm: b08/out: extinction ratio 18.9 dB is below its alarm limit 20.0 dB by 1.1 dB (1.6°)"
    lines = message.body.split("\n")
    assert lines[0] == "b08/out: extinction ratio 18.9 dB is below its alarm limit 20.0 dB by 1.1 dB (1.6°)."
    # 20 dB is 11.42° and 18.7 dB 13.25° from the wanted state: gamma = 2 atan(10^(-ER/20)), CONTRACT 5.
    assert "Now: 18.7 ± 0.2 dB, margin to the limit 20.0 dB: -1.3 dB, -1.8°, read at 02:13:20 UTC" in lines
    assert f"Since: {alarm.began_at:%Y-%m-%d %H:%M:%S} UTC; raised: {alarm.raised_at:%Y-%m-%d %H:%M:%S} UTC" in lines
    assert "Likely cause: laser mode hop" in lines and "You are told as owner." in lines
    assert f"Take it: https://lab.example/events/{Event.objects.get().pk}/" in lines
    assert "Bench: https://lab.example/stations/b08/" in lines and message.path == f"/events/{Event.objects.get().pk}/"


def test_a_webhook_is_posted_each_event_and_its_rise_and_taking_once(people):
    hook = Webhook.objects.create(name="log", url="https://hook.example/")
    Webhook.objects.create(name="old", url="https://old.example/", ended_at=timezone.now())
    alarm = make_alarm(make_bench("b1", people["owner"]), kind="limit", level="warning")
    for _ in range(2):
        call(alarm)
    take_event(Event.objects.get().pk, by=people["chief"])
    posted = [one.message.facts for one in Delivery.objects.filter(webhook=hook).order_by("pk").select_related("message")]
    assert [one["reason"].split("-")[0] for one in posted] == ["warning", "taken"]
    assert posted[0]["benches"] == ["b1"] and posted[0]["alarms"][0]["limit"] == 20.0
    assert Delivery.objects.filter(channel="webhook").count() == 2
