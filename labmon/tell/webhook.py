"""Webhooks: one JSON object a message, with its digest (RFC 9530) and a signature over address, digest and id (RFC 9421)."""

import json
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any, Final

from http_message_signatures import HTTPMessageSigner, HTTPSignatureKeyResolver, algorithms

from labmon.tell.faults import SendFault
from labmon.tell.keys import key_id, key_in_force, private_half
from labmon.tell.mail import message_id
from labmon.tell.models import Delivery, KeyPurpose
from labmon.tell.post import post

SIGNED: Final = ("@method", "@target-uri", "content-type", "content-digest", "idempotency-key")
LABEL, TAG = "labmon", "labmon-event"


@dataclass
class Request:
    """What is signed and sent."""

    url: str
    body: bytes
    method: str = "POST"
    headers: dict[str, str] = field(default_factory=dict)


class _LabKey(HTTPSignatureKeyResolver):
    def __init__(self) -> None:
        self.key = key_in_force(KeyPurpose.WEBHOOK)

    def resolve_private_key(self, key_id: str) -> Any:
        return private_half(self.key)

    def resolve_public_key(self, key_id: str) -> Any:
        return private_half(self.key).public_key()


def send_webhook(delivery: Delivery) -> str:
    """Post a message to a webhook.

    Raises:
        SendFault: It was not taken; finally where the receiver says that it is gone (410) or it was ended here.
    """
    hook = delivery.webhook
    if hook is None or hook.ended_at is not None:
        raise SendFault("the webhook was ended", is_final=True)
    request = signed_request(hook.url, delivery.message.key, delivery.message.facts or {}, datetime.now(UTC))
    answer = post(request.url, request.body, request.headers, is_public_only=False)
    if not answer.is_taken:
        raise SendFault(str(answer), is_final=answer.status == 410)
    return str(answer)


def signed_request(url: str, key: str, facts: dict[str, Any], now: datetime) -> Request:
    """The request with its headers; the same message has the same Idempotency-Key, whenever it is sent."""
    body = json.dumps(facts | {"id": message_id(key)}, allow_nan=False, separators=(",", ":")).encode()
    headers = {"Content-Type": "application/json", "Idempotency-Key": f'"{message_id(key)}"'}
    request = Request(url, body, headers=headers)
    resolver = _LabKey()
    signer = HTTPMessageSigner(signature_algorithm=algorithms.ED25519, key_resolver=resolver)
    signer.sign(
        request, key_id=key_id(resolver.key), created=now, label=LABEL, tag=TAG, covered_component_ids=SIGNED, body=body
    )
    return request
