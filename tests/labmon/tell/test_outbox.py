"""What waits in the outbox: one message for each reason to tell, one delivery for each channel."""

import pytest
from django.db import transaction

from labmon.people.models import Role
from labmon.tell.keys import key_in_force
from labmon.tell.models import Delivery, KeyPurpose, Message, PushDevice, Webhook
from labmon.tell.outbox import Mail, Telling, queue, queue_mail, queue_mails
from tests.factories import make_person

pytestmark = pytest.mark.django_db


def test_subject_is_one_line():
    queue_mail("e", ["a@b.example"], "two\nlines\r\nBcc: x@y.example\0", "")
    assert Message.objects.get().subject == "two lines Bcc: x@y.example"


def test_no_event_is_told_to_nobody(settings):
    queue_mail("e", [], "s", "b")
    queue([Telling(key="f", subject="s", body="b")])
    queue([Telling(key="g", subject="s", body="b", person=make_person(email=""))])
    assert [one.recipients for one in Message.objects.order_by("pk")] == 3 * [[settings.DEFAULT_FROM_EMAIL]]


def test_the_same_key_again_changes_nothing():
    for text in ("one", "two"):
        queue_mails([Mail("e", ["a@b.example", "a@b.example", "c@d.example"], text, text)])
        queue([Telling(key="f", subject=text, body=text, person=make_person(email="x@y.example"))])
    assert sorted(Message.objects.values_list("key", "subject")) == [("e", "one"), ("f", "one")]
    assert Message.objects.get(key="e").recipients == ["a@b.example", "c@d.example"] and Delivery.objects.count() == 2


def test_event_that_is_rolled_back_tells_nobody():
    @transaction.atomic
    def fail():
        queue_mail("e", ["a@b.example"], "s", "b")
        raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        fail()
    assert not Message.objects.exists()


def make_device(person, number, **fields):
    key = key_in_force(KeyPurpose.PUSH)
    return PushDevice.objects.create(
        person=person, key=key, endpoint=f"https://push.example/{number}", p256dh="p", auth="a", name="phone", **fields
    )


def test_a_person_is_told_on_every_channel_of_theirs(django_assert_max_num_queries):
    people = [make_person(Role.OWNER, email=f"{number}@lab.example") for number in range(30)]
    for number, person in enumerate(people):
        make_device(person, number)
    make_device(people[0], 1000, ended_at=people[0].date_joined)
    hook = Webhook.objects.create(name="log", url="http://hook.example/")
    tellings = [Telling(key=f"m{number}", subject="s", body="b", person=person) for number, person in enumerate(people)]
    with django_assert_max_num_queries(6):
        queue([*tellings, Telling(key="hook", subject="s", body="b", webhook=hook, facts={"a": 1})])
    kinds = sorted(Delivery.objects.filter(message__key="m0").values_list("channel", "address"))
    assert kinds == [("mail", "0@lab.example"), ("push", f"device-{people[0].devices.get(ended_at=None).pk}")]
    assert list(Delivery.objects.filter(message__key="hook").values_list("channel", "webhook")) == [("webhook", hook.pk)]
    assert Delivery.objects.count() == 61
