"""Browser notifications: encrypted for the device (RFC 8291), posted to its push service (RFC 8030), signed (VAPID, RFC 8292)."""

import base64
import json
import time
from typing import Final
from urllib.parse import urlsplit

import http_ece
from cryptography.hazmat.primitives.asymmetric.ec import SECP256R1, EllipticCurvePrivateKey, generate_private_key
from django.conf import settings
from django.utils import timezone
from py_vapid import Vapid02

from labmon.tell.faults import SendFault
from labmon.tell.keys import private_half
from labmon.tell.mail import message_id
from labmon.tell.models import Delivery, PushDevice
from labmon.tell.post import post

#: A push service keeps a notification so long for a phone that is off; later nobody needs it.
TTL_S: Final = 4 * 3600
VAPID_LASTS_S: Final = 12 * 3600
#: Push services take 4096 bytes; this is left of them for the text.
MOST_BYTES: Final = 3000


def send_push(delivery: Delivery) -> str:
    """Post a notification to a device's push service.

    Raises:
        SendFault: It was not taken; finally where the subscription is over (404, 410), which ends the device.
    """
    device = delivery.device
    if device is None or device.ended_at is not None or not device.person.is_active:
        raise SendFault("the device was ended", is_final=True)
    message = delivery.message
    content = notification(message.subject, message.body, message.path, message.key)
    headers = {
        "Content-Encoding": "aes128gcm",
        "Content-Type": "application/octet-stream",
        "TTL": str(TTL_S),
        "Urgency": "high",
        "Topic": message_id(message.key),
        "Authorization": _vapid(device),
    }
    body = encrypted(content, device.p256dh, device.auth)
    answer = post(device.endpoint, body, headers, is_public_only=not settings.PUSH_LOCAL)
    if answer.status in (404, 410):
        _end(device, str(answer))
        raise SendFault(f"the subscription is over: {answer}", is_final=True)
    if not answer.is_taken:
        raise SendFault(str(answer), is_final=answer.status in (400, 413))
    return str(answer)


def notification(title: str, body: str, path: str, key: str) -> bytes:
    """What the service worker shows: the subject, the first lines, where it leads."""
    text = body.split("\n\n", 2)
    said = {"title": title, "text": "\n\n".join(text[:2])[:600], "path": path or "/alarms/", "tag": message_id(key)}
    whole = json.dumps(said).encode()
    return whole if len(whole) <= MOST_BYTES else json.dumps(said | {"text": ""}).encode()


def encrypted(
    content: bytes, p256dh: str, auth: str, *, salt: bytes | None = None, sender: EllipticCurvePrivateKey | None = None
) -> bytes:
    """``content`` for one device, aes128gcm in one record (RFC 8291). Salt and sender's key are drawn anew unless given.

    Source: RFC 8291, 3 and 4 (computed by the http_ece library).
    """
    return http_ece.encrypt(
        content,
        salt=salt,
        private_key=sender or generate_private_key(SECP256R1()),
        dh=unpacked(p256dh),
        auth_secret=unpacked(auth),
        version="aes128gcm",
    )


def unpacked(text: str) -> bytes:
    """Bytes of base64url, with or without its padding."""
    return base64.urlsafe_b64decode(text + "=" * (-len(text) % 4))


def _vapid(device: PushDevice) -> str:
    parts = urlsplit(device.endpoint)
    claims = {
        "aud": f"{parts.scheme}://{parts.netloc}",
        "exp": int(time.time()) + VAPID_LASTS_S,
        "sub": settings.PUBLIC_URL if settings.PUBLIC_URL.startswith("https:") else f"mailto:{settings.DEFAULT_FROM_EMAIL}",
    }
    return Vapid02(private_half(device.key), conf={"no-strict": True}).sign(claims)["Authorization"]


def _end(device: PushDevice, why: str) -> None:
    PushDevice.objects.filter(pk=device.pk, ended_at=None).update(ended_at=timezone.now(), ended_why=why[:200])
