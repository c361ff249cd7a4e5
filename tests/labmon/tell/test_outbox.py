import smtplib
from datetime import timedelta
from threading import Thread

import pytest
from django.core import mail as django_mail
from django.db import connection, transaction
from django.utils import timezone

from labmon.tell.models import OutboxMail
from labmon.tell.outbox import queue_mail, send_waiting


def fail_with(monkeypatch, fault):
    def send(self, fail_silently=False):
        raise fault

    monkeypatch.setattr("django.core.mail.EmailMessage.send", send)


@pytest.mark.django_db
def test_one_mail_an_event():
    for _ in range(3):
        queue_mail("alarm-7-raised", ["owner@lab.example"], "ER is low", "ER is 19 dB.")
    assert send_waiting() == 1 and send_waiting() == 0
    (sent,) = django_mail.outbox
    assert (sent.to, sent.subject, sent.body) == (["owner@lab.example"], "ER is low", "ER is 19 dB.")


@pytest.mark.django_db
def test_subject_is_one_line():
    queue_mail("e", ["a@b.example"], "two\nlines\r\nBcc: x@y.example", "")
    assert OutboxMail.objects.get().subject == "two lines Bcc: x@y.example"


@pytest.mark.django_db
def test_no_event_is_told_to_nobody(settings):
    queue_mail("e", [], "s", "b")
    assert OutboxMail.objects.get().recipients == [settings.DEFAULT_FROM_EMAIL]


@pytest.mark.django_db
@pytest.mark.parametrize("fault", [ConnectionRefusedError("no"), TimeoutError("slow"), smtplib.SMTPServerDisconnected("gone")])
def test_failed_mail_waits_longer_each_time_and_goes_out_in_the_end(monkeypatch, fault):
    queue_mail("e", ["a@b.example"], "s", "b")
    waits = []
    with monkeypatch.context() as patch:
        fail_with(patch, fault)
        for _ in range(12):
            before = timezone.now()
            assert send_waiting() == 0
            row = OutboxMail.objects.get()
            waits.append((row.next_try_at - before).total_seconds())
            assert type(fault).__name__ in row.last_error
            OutboxMail.objects.update(next_try_at=timezone.now() - timedelta(seconds=1))
    assert waits == pytest.approx([min(15 * 2**n, 3600) for n in range(12)], abs=1.0)
    assert send_waiting() == 1
    assert OutboxMail.objects.get().tries == 13


@pytest.mark.django_db
def test_mail_not_due_stays():
    queue_mail("e", ["a@b.example"], "s", "b")
    OutboxMail.objects.update(next_try_at=timezone.now() + timedelta(minutes=1))
    assert send_waiting() == 0


@pytest.mark.django_db
def test_event_that_is_rolled_back_tells_nobody():
    @transaction.atomic
    def fail():
        queue_mail("e", ["a@b.example"], "s", "b")
        raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        fail()
    assert send_waiting() == 0


@pytest.mark.django_db(transaction=True)
def test_two_workers_send_each_mail_once():
    for number in range(20):
        queue_mail(f"e{number}", ["a@b.example"], f"mail {number}", "b")

    def work():
        send_waiting()
        connection.close()

    workers = [Thread(target=work) for _ in range(4)]
    for worker in workers:
        worker.start()
    for worker in workers:
        worker.join()
    assert sorted(sent.subject for sent in django_mail.outbox) == sorted(f"mail {number}" for number in range(20))
    assert not OutboxMail.objects.filter(sent_at=None).exists()
