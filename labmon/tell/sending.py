"""Hands over what waits in the outbox: one sender at a time, retried with back-off, each attempt in the log.

A delivery is leased before it is tried and marked after, both committed at once, so that no transaction waits for a mail
server. A worker that dies in between leaves the lease: when it is over the delivery is tried again, under the same id.
"""

import logging
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import timedelta
from typing import Final

from django.db import InterfaceError, OperationalError, connection, transaction
from django.db.models import Case, F, IntegerField, Q, When
from django.utils import timezone

from labmon.claims import BEAT
from labmon.tell.faults import SendFault
from labmon.tell.mail import send_mail
from labmon.tell.models import Channel, Delivery, DeliveryTry
from labmon.tell.push import send_push
from labmon.tell.webhook import send_webhook

FIRST_WAIT_S: Final = 15.0
LONGEST_WAIT_S: Final = 3600.0
#: After so long without success a delivery is given up: the event it told of is long over.
GIVE_UP_AFTER: Final = timedelta(days=3)
#: No attempt takes longer than this, so a lease that is older is of a worker that died.
LEASE: Final = timedelta(seconds=60)
#: So long a database that went away while a mail was handed over is waited for, to note that it was.
MARK_WITHIN_S: Final = 30.0
_SENDERS = {Channel.MAIL: send_mail, Channel.PUSH: send_push, Channel.WEBHOOK: send_webhook}
log = logging.getLogger(__name__)


def send_waiting(limit: int = 50, *, for_s: float = 20.0) -> int:
    """Try what is due, mails first, at most ``limit`` and about ``for_s`` seconds; returns how many were handed over.

    Where another worker is sending, none: it takes what is due. Not to be called inside a transaction.
    """
    sent, until_s = 0, time.monotonic() + for_s
    with _one_sender() as is_ours:
        for _ in range(limit if is_ours else 0):
            delivery = _lease_next()
            if delivery is None or time.monotonic() > until_s:
                break
            sent += _try(delivery)
    return sent


@contextmanager
def _one_sender() -> Iterator[bool]:
    """A lock of the connection: it ends with its worker."""
    with connection.cursor() as cursor:
        cursor.execute("SELECT pg_try_advisory_lock(%s, hashtext('send'))", [BEAT])
        is_ours = bool(cursor.fetchone()[0])
    try:
        yield is_ours
    finally:
        if is_ours:
            try:
                with connection.cursor() as cursor:
                    cursor.execute("SELECT pg_advisory_unlock(%s, hashtext('send'))", [BEAT])
            except (OperationalError, InterfaceError):  # the connection is gone, and the lock with it
                connection.close()


@transaction.atomic
def _lease_next() -> Delivery | None:
    now = timezone.now()
    mails_first = Case(When(channel=Channel.MAIL, then=0), default=1, output_field=IntegerField())
    delivery = (
        Delivery.objects.select_for_update(skip_locked=True, of=("self",))
        .select_related("message", "device__key", "webhook")
        .filter(sent_at=None, gave_up_at=None, next_try_at__lte=now)
        .order_by(mails_first, "next_try_at", "pk")
        .first()
    )
    if delivery is None:
        return None
    Delivery.objects.filter(pk=delivery.pk).update(next_try_at=now + LEASE, tries=F("tries") + 1)
    DeliveryTry.objects.create(delivery=delivery, at=now)
    delivery.tries += 1
    return delivery


def _try(delivery: Delivery) -> bool:
    began_s = time.monotonic()
    facts = {"message_key": delivery.message.key, "channel": delivery.channel, "tries": delivery.tries}
    try:
        said = _SENDERS[Channel(delivery.channel)](delivery)
    except SendFault as fault:
        wait_s = min(FIRST_WAIT_S * 2.0 ** min(delivery.tries - 1, 20), LONGEST_WAIT_S)
        _mark_for_sure(delivery, time.monotonic() - began_s, fault, wait_s)
        log.warning("message_failed", extra=facts | {"wait_s": wait_s, "is_final": fault.is_final, "fault": str(fault)})
        return False
    _mark_for_sure(delivery, time.monotonic() - began_s, said, 0.0)
    log.info("message_sent", extra=facts)
    return True


def _mark_for_sure(delivery: Delivery, took_s: float, outcome: str | SendFault, wait_s: float) -> None:
    """Note the outcome; should the database be away just now, as soon as it is back."""
    until_s = time.monotonic() + MARK_WITHIN_S
    while True:
        try:
            return _mark(delivery, took_s, outcome, wait_s)
        except (OperationalError, InterfaceError) as fault:
            if time.monotonic() > until_s:
                raise
            log.warning("mark_waits_for_database", extra={"message_key": delivery.message.key, "fault": str(fault)})
            connection.close()
            time.sleep(0.5)


@transaction.atomic
def _mark(delivery: Delivery, took_s: float, outcome: str | SendFault, wait_s: float) -> None:
    now, row = timezone.now(), Delivery.objects.filter(pk=delivery.pk)
    attempt = delivery.attempts.order_by("-pk")[:1].values("pk")
    if isinstance(outcome, SendFault):
        is_over = outcome.is_final or now - delivery.message.made_at > GIVE_UP_AFTER
        row.update(
            next_try_at=now + timedelta(seconds=wait_s), last_error=str(outcome)[:500], gave_up_at=now if is_over else None
        )
        if not outcome.is_final:
            _spare(delivery, now + timedelta(seconds=FIRST_WAIT_S))
    else:
        row.update(sent_at=now, last_error="")
    DeliveryTry.objects.filter(pk__in=attempt).update(
        took_s=took_s, is_handed_over=not isinstance(outcome, SendFault), said=str(outcome)[:500]
    )


def _spare(delivery: Delivery, until) -> None:
    """What waits for the same receiver waits a little with it: one that hangs must not hold up the others."""
    same = Q(webhook=delivery.webhook_id) if delivery.webhook_id else Q(device=delivery.device_id)
    if delivery.channel != Channel.MAIL:
        Delivery.objects.filter(same, sent_at=None, gave_up_at=None, next_try_at__lt=until).update(next_try_at=until)
