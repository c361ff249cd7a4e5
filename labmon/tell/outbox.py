"""Mails wait here from the event's transaction until they are sent: one a event, retried, safe with several workers."""

import logging
import smtplib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import timedelta
from hashlib import sha256

from django.conf import settings
from django.core.mail import EmailMessage
from django.db import transaction
from django.db.models import F
from django.utils import timezone

from labmon.tell.models import OutboxMail

FIRST_WAIT_S = 15.0
LONGEST_WAIT_S = 3600.0
log = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True)
class Mail:
    """A mail to be sent; ``event`` makes it one mail an event."""

    event: str
    recipients: Sequence[str]
    subject: str
    body: str


def queue_mail(event: str, recipients: Sequence[str], subject: str, body: str) -> None:
    """Write a mail in the transaction of its event; the same ``event`` again changes nothing."""
    queue_mails([Mail(event, recipients, subject, body)])


def queue_mails(mails: Iterable[Mail]) -> None:
    """As `queue_mail` for many, in one statement.

    Without recipients a mail goes to the lab's own mailbox (LABMON_MAIL_FROM), so that no event is told to nobody.
    """
    rows = [
        OutboxMail(
            event=mail.event,
            recipients=list(dict.fromkeys(mail.recipients)) or [settings.DEFAULT_FROM_EMAIL],
            subject=one_line(mail.subject),
            body=mail.body,
        )
        for mail in mails
    ]
    if rows:
        OutboxMail.objects.bulk_create(rows, ignore_conflicts=True)


def one_line(text: str) -> str:
    """A subject without line breaks, at most 250 characters."""
    return " ".join(text.split())[:250]


def send_waiting(limit: int = 50) -> int:
    """Send what is due, at most ``limit``; returns how many went out. Two workers never take the same mail."""
    sent = 0
    for _ in range(limit):
        outcome = _send_next()
        if outcome is None:
            break
        sent += outcome
    return sent


@transaction.atomic
def _send_next() -> bool | None:
    mail = (
        OutboxMail.objects.select_for_update(skip_locked=True)
        .filter(sent_at=None, next_try_at__lte=timezone.now())
        .order_by("next_try_at", "pk")
        .first()
    )
    if mail is None:
        return None
    try:
        _message(mail).send()
    except (OSError, smtplib.SMTPException) as fault:
        _note_failure(mail, fault)
        return False
    OutboxMail.objects.filter(pk=mail.pk).update(sent_at=timezone.now(), tries=F("tries") + 1, last_error="")
    log.info("mail_sent", extra={"mail_event": mail.event, "recipients": len(mail.recipients)})
    return True


def _message(mail: OutboxMail) -> EmailMessage:
    """The same event has the same Message-ID: a mail sent twice by a crash is recognised as one by the reader's program."""
    identity = sha256(f"{settings.PUBLIC_URL} {mail.event}".encode()).hexdigest()[:32]
    return EmailMessage(mail.subject, mail.body, to=mail.recipients, headers={"Message-ID": f"<{identity}@labmon>"})


def _note_failure(mail: OutboxMail, fault: Exception) -> None:
    wait_s = min(FIRST_WAIT_S * 2.0 ** min(mail.tries, 20), LONGEST_WAIT_S)
    OutboxMail.objects.filter(pk=mail.pk).update(
        tries=F("tries") + 1,
        next_try_at=timezone.now() + timedelta(seconds=wait_s),
        last_error=f"{type(fault).__name__}: {fault}"[:500],
    )
    log.warning("mail_failed", extra={"mail_event": mail.event, "tries": mail.tries + 1, "wait_s": wait_s, "fault": str(fault)})
