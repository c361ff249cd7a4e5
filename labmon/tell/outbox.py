"""Messages wait here from the transaction of what they tell of until they are handed over: each once, at least once.

Entry points: `queue` (a message to a person by all their channels, or to a webhook), `queue_mails` (to bare addresses); the
worker hands over by `labmon.tell.sending.send_waiting`. The same key again changes nothing. Every message has a stable id on
each channel (Message-ID of a mail, Topic of a notification, Idempotency-Key of a webhook), so that what a crash sent
twice is recognised as one by whoever gets it.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

from django.conf import settings
from django.utils import timezone

from labmon.people.models import Person
from labmon.tell.models import Channel, Delivery, Message, MessageKind, PushDevice, Webhook


@dataclass(frozen=True, slots=True)
class Mail:
    """A mail to bare addresses; ``event`` (any words) makes it one mail for each of what it tells of."""

    event: str
    recipients: Sequence[str]
    subject: str
    body: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Telling:
    """A message to be told.

    Attributes:
        key: Makes it one message for each reason to tell.
        person: Who is told, by mail and on their devices; None: the lab's own mailbox.
        webhook: Instead of a person, one address that is posted ``facts``.
        not_before: Handed over no earlier (quiet hours).
    """

    key: str
    subject: str
    body: str
    kind: str = MessageKind.NOTICE
    person: Person | None = None
    webhook: Webhook | None = None
    event_id: int | None = None
    level: str = ""
    duty: str = ""
    path: str = ""
    facts: dict[str, Any] = field(default_factory=dict)
    not_before: datetime | None = None


def queue_mail(event: str, recipients: Sequence[str], subject: str, body: str) -> None:
    """Write a mail in the transaction of its event; the same ``event`` again changes nothing."""
    queue_mails([Mail(event, recipients, subject, body)])


def queue_mails(mails: Iterable[Mail]) -> None:
    """As `queue_mail` for many, in a fixed number of statements.

    Without recipients a mail goes to the lab's own mailbox (LABMON_MAIL_FROM), so that no event is told to nobody.
    """
    given = list(mails)
    fresh = _fresh(Message(key=mail.event, subject=one_line(mail.subject), body=mail.body) for mail in given)
    addresses = {mail.event: ", ".join(dict.fromkeys(mail.recipients)) or settings.DEFAULT_FROM_EMAIL for mail in given}
    now = timezone.now()
    _add(Delivery(message=one, channel=Channel.MAIL, address=addresses[one.key], next_try_at=now) for one in fresh)


def queue(tellings: Iterable[Telling]) -> list[Message]:
    """Write messages with a delivery for each channel; returns those that are new. A fixed number of statements."""
    given = {telling.key: telling for telling in tellings}
    fresh = _fresh(_message(telling) for telling in given.values())
    if not fresh:
        return []
    persons = {telling.person.pk for telling in given.values() if telling.person}
    devices: dict[int, list[PushDevice]] = {}
    for device in PushDevice.objects.filter(person__in=persons, ended_at=None).order_by("pk") if persons else ():
        devices.setdefault(device.person_id, []).append(device)
    now = timezone.now()
    _add(
        delivery
        for message in fresh
        for delivery in _deliveries(message, given[message.key], devices.get(message.person_id or 0, []), now)
    )
    return fresh


def _message(telling: Telling) -> Message:
    return Message(
        key=telling.key,
        kind=telling.kind,
        event_id=telling.event_id,
        person=telling.person,
        level=telling.level,
        duty=telling.duty,
        subject=one_line(telling.subject),
        body=telling.body,
        path=telling.path,
        facts=telling.facts or None,
    )


def _fresh(messages: Iterable[Message]) -> list[Message]:
    """Insert those whose key is new; only one of two workers gets each."""
    rows = {row.key: row for row in messages}
    if not rows:
        return []
    known = set(Message.objects.filter(key__in=rows).values_list("key", flat=True))
    wanted = [row for key, row in rows.items() if key not in known]
    if not wanted:
        return []
    Message.objects.bulk_create(wanted, ignore_conflicts=True)
    # A row that another worker wrote meanwhile has deliveries already: _add leaves them as they are.
    return list(Message.objects.filter(key__in=[row.key for row in wanted]).order_by("pk"))


def _deliveries(message: Message, telling: Telling, devices: Sequence[PushDevice], now: datetime) -> Iterable[Delivery]:
    due = max(telling.not_before or now, now)
    if telling.webhook is not None:
        hook = telling.webhook
        return [Delivery(message=message, channel=Channel.WEBHOOK, address=f"webhook-{hook.pk}", webhook=hook, next_try_at=due)]
    found = [
        Delivery(message=message, channel=Channel.PUSH, address=f"device-{device.pk}", device=device, next_try_at=due)
        for device in devices
    ]
    address = telling.person.email if telling.person else ""
    if address or not found:
        found.append(
            Delivery(message=message, channel=Channel.MAIL, address=address or settings.DEFAULT_FROM_EMAIL, next_try_at=due)
        )
    return found


def _add(deliveries: Iterable[Delivery]) -> None:
    rows = list(deliveries)
    if rows:
        Delivery.objects.bulk_create(rows, ignore_conflicts=True)


def one_line(text: str) -> str:
    """A subject without line breaks, at most 250 characters; the database takes no NUL."""
    return " ".join(text.replace("\0", "").split())[:250]
