"""Devices and webhooks that are told: added and ended. Each write leaves its audit row."""

from urllib.parse import urlsplit

from django.conf import settings
from django.db import transaction
from django.utils import timezone

from labmon.audit.actions import note
from labmon.errors import WriteError
from labmon.people.models import Person
from labmon.tell.keys import key_in_force
from labmon.tell.models import KeyPurpose, MessageKind, PushDevice, Webhook
from labmon.tell.outbox import Telling, queue
from labmon.tell.push import unpacked

MOST_DEVICES = 10


@transaction.atomic
def add_device(person: Person, *, endpoint: str, p256dh: str, auth: str, name: str) -> PushDevice:
    """Tell someone on this browser; one that subscribes again, also for somebody else, replaces what it had.

    Raises:
        WriteError: It is no subscription, or there are too many.
    """
    _check_endpoint(endpoint)
    _check_key("p256dh", p256dh, 65)
    _check_key("auth", auth, 16)
    PushDevice.objects.filter(endpoint=endpoint, ended_at=None).update(ended_at=timezone.now(), ended_why="subscribed again")
    if PushDevice.objects.filter(person=person, ended_at=None).count() >= MOST_DEVICES:
        raise WriteError("endpoint", f"You have {MOST_DEVICES} devices.", "End one of them first.")
    label = " ".join(name.replace("\0", "").split())[:100] or "a browser"
    key = key_in_force(KeyPurpose.PUSH)
    device = PushDevice.objects.create(person=person, key=key, endpoint=endpoint, p256dh=p256dh, auth=auth, name=label)
    note(person, "add device", person, after={"device": device.pk, "name": label})
    return device


def _check_endpoint(endpoint: str) -> None:
    parts = urlsplit(endpoint) if "\0" not in endpoint else None
    is_fit = parts is not None and parts.hostname and (parts.scheme == "https" or settings.PUSH_LOCAL)
    if not is_fit or len(endpoint) > 1000:
        raise WriteError("endpoint", "That is no address of a push service.", "Let the browser subscribe anew.")


def _check_key(field: str, text: str, length: int) -> None:
    try:
        found = unpacked(text)
    except ValueError:
        found = b""
    if len(found) != length:
        raise WriteError(field, "That is no key of a subscription.", "Let the browser subscribe anew.")


@transaction.atomic
def end_device(device_id: int, *, by: Person) -> None:
    """Tell nobody on it any more; a second time changes nothing."""
    device = PushDevice.objects.select_for_update(of=("self",)).get(pk=device_id)
    if device.ended_at is None:
        device.ended_at, device.ended_why = timezone.now(), "ended by hand"
        device.save(update_fields=["ended_at", "ended_why"])
        note(by, "end device", by, after={"device": device.pk, "name": device.name})


@transaction.atomic
def send_trial(person: Person) -> None:
    """A message to oneself on every channel, to see that it arrives."""
    now = timezone.now()
    queue([
        Telling(
            key=f"trial-{person.pk}-{now:%Y%m%dT%H%M%S%f}",
            kind=MessageKind.NOTICE,
            person=person,
            subject="labmon can reach you here",
            body=f"Asked for by {person.username} at {now:%H:%M:%S} UTC. Nothing is wrong.",
            path="/you/telling/",
        )
    ])


@transaction.atomic
def add_webhook(name: str, url: str, *, by: Person | None) -> Webhook:
    """An address that is posted every event of the lab.

    Raises:
        WriteError: It has no name, or is no address to post to.
    """
    label = " ".join(name.replace("\0", "").split())
    if not 0 < len(label) <= 100:
        raise WriteError("name", "It needs a name of 1 to 100 characters.", "Say whose it is, for example corridor lamp.")
    try:
        parts = urlsplit(url.strip())
        is_fit = parts.scheme in ("http", "https") and bool(parts.hostname) and "\0" not in url and not parts.username
        _ = parts.port
    except ValueError:
        is_fit = False
    if not is_fit or len(url) > 500 or not url.isascii():
        raise WriteError("url", "That is no address to post to.", "Write one such as https://hooks.lab.example/labmon.")
    hook = Webhook.objects.create(name=label, url=url.strip(), made_by=by)
    note(by, "add webhook", hook, after={"name": label, "url": hook.url})
    return hook


@transaction.atomic
def end_webhook(webhook_id: int, *, by: Person | None) -> None:
    """Post nothing more to it; a second time changes nothing."""
    hook = Webhook.objects.select_for_update(of=("self",)).get(pk=webhook_id)
    if hook.ended_at is None:
        hook.ended_at = timezone.now()
        hook.save(update_fields=["ended_at"])
        note(by, "end webhook", hook, {"name": hook.name, "url": hook.url}, None)
