"""What was told to whom, and what became of it."""


from dataclasses import dataclass
from datetime import datetime

from django.db.models import Prefetch

from labmon.people.models import Person
from labmon.tell.keys import key_id, key_in_force, public_pem, push_public
from labmon.tell.models import Channel, Delivery, DeliveryTry, KeyPurpose, Message, PushDevice, QuietHours, Webhook


@dataclass(frozen=True, slots=True)
class TryRow:
    """One attempt; ``is_handed_over`` None: cut short."""

    at: datetime
    took_s: float | None
    is_handed_over: bool | None
    said: str


@dataclass(frozen=True, slots=True)
class DeliveryRow:
    """A message on one channel."""

    channel: str
    to: str
    sent_at: datetime | None
    gave_up_at: datetime | None
    next_try_at: datetime
    last_error: str
    tries: list[TryRow]


@dataclass(frozen=True, slots=True)
class MessageRow:
    """One message with what became of it."""

    kind: str
    who: str
    duty: str
    subject: str
    made_at: datetime
    deliveries: list[DeliveryRow]


def messages_of(event_id: int) -> list[MessageRow]:
    """What was told of an event, oldest first; three queries."""
    tries = Prefetch("attempts", DeliveryTry.objects.order_by("pk"))
    deliveries = Prefetch("deliveries", Delivery.objects.select_related("device", "webhook").order_by("pk"))
    rows = Message.objects.filter(event=event_id).select_related("person")
    return [_message_row(row) for row in rows.prefetch_related(deliveries, _through(tries)).order_by("made_at", "pk")]


def _through(tries: Prefetch) -> Prefetch:
    return Prefetch("deliveries__attempts", tries.queryset)


def _message_row(row: Message) -> MessageRow:
    deliveries = list(row.deliveries.all())
    hooks = [one.webhook.name for one in deliveries if one.webhook]
    who = row.person.username if row.person else f"webhook {hooks[0]}" if hooks else "the lab's mailbox"
    return MessageRow(row.get_kind_display(), who, row.duty, row.subject, row.made_at, [_delivery_row(one) for one in deliveries])


def _delivery_row(row: Delivery) -> DeliveryRow:
    to = row.device.name if row.device else row.webhook.name if row.webhook else row.address
    tries = [TryRow(one.at, one.took_s, one.is_handed_over, one.said) for one in row.attempts.all()]
    return DeliveryRow(
        Channel(row.channel).label.lower(), to, row.sent_at, row.gave_up_at, row.next_try_at, row.last_error, tries
    )


def devices_of(person: Person) -> list[PushDevice]:
    """Someone's devices, ended ones last."""
    return sorted(PushDevice.objects.filter(person=person).order_by("-pk"), key=lambda one: one.ended_at is not None)


def quiet_hours_of(person: Person) -> QuietHours | None:
    """When someone is not to be called."""
    return QuietHours.objects.filter(person=person).first()


def push_key() -> str:
    """What a browser subscribes with."""
    return push_public(key_in_force(KeyPurpose.PUSH))


def webhooks() -> list[Webhook]:
    """Those in force."""
    return list(Webhook.objects.filter(ended_at=None).order_by("pk"))


def webhook_key() -> tuple[str, str]:
    """The id of the key that signs webhooks, and its public half."""
    key = key_in_force(KeyPurpose.WEBHOOK)
    return key_id(key), public_pem(key)


