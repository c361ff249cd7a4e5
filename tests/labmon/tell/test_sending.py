"""Handing over: with back-off, each attempt in the log, one sender at a time, under one id."""

import smtplib
from datetime import timedelta
from threading import Thread

import pytest
from django.core import mail as django_mail
from django.db import OperationalError, connection
from django.utils import timezone

from labmon.tell import sending
from labmon.tell.models import Delivery, DeliveryTry
from labmon.tell.outbox import queue_mail
from labmon.tell.sending import send_waiting


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
    assert sent.extra_headers["Message-ID"].endswith("@labmon>") and sent.extra_headers["Auto-Submitted"] == "auto-generated"
    assert DeliveryTry.objects.get().is_handed_over


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
            row = Delivery.objects.get()
            waits.append((row.next_try_at - before).total_seconds())
            assert type(fault).__name__ in row.last_error
            Delivery.objects.update(next_try_at=timezone.now() - timedelta(seconds=1))
    assert waits == pytest.approx([min(15 * 2**n, 3600) for n in range(12)], abs=1.0)
    assert send_waiting() == 1
    assert Delivery.objects.get().tries == 13
    assert [one.is_handed_over for one in DeliveryTry.objects.order_by("pk")] == 12 * [False] + [True]


@pytest.mark.django_db
def test_a_refused_address_is_given_up_and_says_so(monkeypatch):
    queue_mail("e", ["nobody@b.example"], "s", "b")
    fail_with(monkeypatch, smtplib.SMTPRecipientsRefused({"nobody@b.example": (550, b"no such user")}))
    assert send_waiting() == 0
    row = Delivery.objects.get()
    assert row.gave_up_at and "no such user" in row.last_error


@pytest.mark.django_db
def test_after_three_days_it_is_given_up(monkeypatch):
    queue_mail("e", ["a@b.example"], "s", "b")
    message = Delivery.objects.get().message
    message.made_at = timezone.now() - timedelta(days=3, minutes=1)
    message.save()
    fail_with(monkeypatch, TimeoutError("slow"))
    send_waiting()
    assert Delivery.objects.get().gave_up_at


@pytest.mark.django_db
def test_mail_not_due_stays():
    queue_mail("e", ["a@b.example"], "s", "b")
    Delivery.objects.update(next_try_at=timezone.now() + timedelta(minutes=1))
    assert send_waiting() == 0


@pytest.mark.django_db
def test_a_worker_that_died_leaves_a_lease_and_the_next_one_sends_under_the_same_id(monkeypatch):
    class Killed(BaseException):
        """As SIGKILL: nothing is noted."""

    queue_mail("e", ["a@b.example"], "s", "b")
    with monkeypatch.context() as patch:
        fail_with(patch, Killed())
        with pytest.raises(Killed):
            send_waiting()
    assert send_waiting() == 0, "leased"
    Delivery.objects.update(next_try_at=timezone.now() - timedelta(seconds=1))
    assert send_waiting() == 1
    assert [one.is_handed_over for one in DeliveryTry.objects.order_by("pk")] == [None, True]


@pytest.mark.django_db
def test_a_database_that_goes_away_while_a_mail_is_handed_over_is_waited_for(monkeypatch):
    """Else it would be sent again, though the mail server has it."""
    queue_mail("e", ["a@b.example"], "s", "b")
    true_mark, left = sending._mark, [2]

    def mark(*given):
        if left[0]:
            left[0] -= 1
            raise OperationalError("the database system is starting up")
        return true_mark(*given)

    monkeypatch.setattr(sending, "_mark", mark)
    monkeypatch.setattr(sending.time, "sleep", lambda _: None)
    monkeypatch.setattr(sending.connection, "close", lambda: None)
    assert send_waiting() == 1 and len(django_mail.outbox) == 1
    assert send_waiting() == 0 and Delivery.objects.get().sent_at


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
    assert not Delivery.objects.filter(sent_at=None).exists()
