"""Mail through a real SMTP server."""

from datetime import timedelta

import pytest
from django.utils import timezone

from labmon.tell.models import Delivery, DeliveryTry
from labmon.tell.outbox import Telling, queue, queue_mail
from labmon.tell.sending import send_waiting
from tests.factories import make_person
from tests.labmon.tell.servers import mail_server

pytestmark = pytest.mark.django_db


@pytest.fixture
def box(settings):
    with mail_server() as box:
        settings.EMAIL_BACKEND = "django.core.mail.backends.smtp.EmailBackend"
        settings.EMAIL_HOST, settings.EMAIL_PORT, settings.EMAIL_TIMEOUT = "127.0.0.1", box.port, 5.0
        settings.DEFAULT_FROM_EMAIL = "labmon@lab.example"
        yield box


def test_a_mail_arrives_as_plain_text_with_a_stable_id(box):
    person = make_person(email="asha@lab.example")
    queue([Telling(key="event-7", person=person, subject="ER is 18.7 ± 0.2 dB", body="γ = 13.3°\n")])
    assert send_waiting() == 1
    ((to, mail),) = box.mails
    assert to == ["asha@lab.example"] and mail.get_content_type() == "text/plain"
    assert "γ = 13.3°" in mail.get_payload(decode=True).decode() and mail["From"] == "labmon@lab.example"
    Delivery.objects.update(sent_at=None, next_try_at=timezone.now())  # as after a crash behind the server's answer
    send_waiting()
    assert [one["Message-ID"] for _, one in box.mails] == 2 * [mail["Message-ID"]]


def test_a_server_that_asks_for_later_gets_it_later(box):
    box.refusals = ["451 try later", "421 busy"]
    queue_mail("e", ["asha@lab.example"], "s", "b")
    for _ in range(3):
        send_waiting()
        Delivery.objects.update(next_try_at=timezone.now() - timedelta(seconds=1))
    assert len(box.mails) == 1
    assert [one.is_handed_over for one in DeliveryTry.objects.order_by("pk")] == [False, False, True]
    assert "try later" in DeliveryTry.objects.order_by("pk")[0].said


def test_an_address_that_is_refused_for_good_is_given_up(box):
    queue_mail("e", ["nobody@lab.example"], "s", "b")
    assert send_waiting() == 0 and Delivery.objects.get().gave_up_at and "no such user" in Delivery.objects.get().last_error
    assert box.mails == []


def test_a_server_that_is_away_is_tried_again(box, settings):
    settings.EMAIL_PORT = 9
    queue_mail("e", ["asha@lab.example"], "s", "b")
    assert send_waiting() == 0
    settings.EMAIL_PORT = box.port
    Delivery.objects.update(next_try_at=timezone.now())
    assert send_waiting() == 1 and len(box.mails) == 1
