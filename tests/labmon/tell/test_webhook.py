"""Webhooks to a real receiver: signed as RFC 9421 says, checked by its library and by hand; failing, hanging, repeating."""

import base64
import hashlib
import json
from datetime import timedelta

import pytest
from cryptography.hazmat.primitives.serialization import load_pem_public_key
from django.utils import timezone
from http_message_signatures import HTTPMessageVerifier, HTTPSignatureKeyResolver, InvalidSignature, algorithms

from labmon.tell import post
from labmon.tell.actions import add_webhook, end_webhook
from labmon.tell.keys import renew_key
from labmon.tell.models import Delivery, DeliveryTry, KeyPurpose
from labmon.tell.outbox import Telling, queue, queue_mail
from labmon.tell.queries import webhook_key
from labmon.tell.sending import send_waiting
from labmon.tell.webhook import SIGNED, TAG, Request
from tests.labmon.tell.servers import http_receiver

pytestmark = pytest.mark.django_db
FACTS = {"event": 7, "sentence": "ER is 18.7 ± 0.2 dB", "benches": ["b1"]}


@pytest.fixture
def receiver():
    with http_receiver() as receiver:
        yield receiver


@pytest.fixture
def hook(receiver):
    return add_webhook("corridor lamp", f"{receiver.url}/labmon?lab=1", by=None)


class PublishedKey(HTTPSignatureKeyResolver):
    """The key as the page of calls shows it."""

    def resolve_public_key(self, key_id):
        known, pem = webhook_key()
        assert key_id == known
        return load_pem_public_key(pem.encode())

    def resolve_private_key(self, key_id):
        raise NotImplementedError


def as_received(receiver, posted, **changed):
    return Request(**({"url": f"{receiver.url}{posted.path}", "body": posted.body, "headers": dict(posted.headers)} | changed))


def verify(request):
    verifier = HTTPMessageVerifier(signature_algorithm=algorithms.ED25519, key_resolver=PublishedKey())
    return verifier.verify(request, expect_tag=TAG, require_components=SIGNED, body=request.body)


def tell(hook, key="event-7-alarm"):
    queue([Telling(key=key, webhook=hook, subject="s", body="", facts=FACTS)])


def due():
    Delivery.objects.update(next_try_at=timezone.now() - timedelta(seconds=1))


def test_the_receiver_can_check_who_sent_it_and_that_nothing_was_changed(receiver, hook):
    tell(hook)
    assert send_waiting() == 1
    (posted,) = receiver.got
    said = json.loads(posted.body)
    assert {name: said[name] for name in FACTS} == FACTS and posted.headers["Idempotency-Key"] == f'"{said["id"]}"'
    assert verify(as_received(receiver, posted))[0].parameters["tag"] == TAG
    # RFC 9530, 2: Content-Digest is a dictionary of algorithm and byte sequence; here computed without the library.
    digest = base64.b64encode(hashlib.sha256(posted.body).digest()).decode()
    assert posted.headers["Content-Digest"] == f"sha-256=:{digest}:"


def test_the_signature_base_is_that_of_the_standard(receiver, hook):
    """RFC 9421, 2.5 (structure from memory): a line for each component, "@signature-params" last; checked with Ed25519 alone."""
    tell(hook)
    send_waiting()
    (posted,) = receiver.got
    label, _, parameters = posted.headers["Signature-Input"].partition("=")
    values = {"@method": "POST", "@target-uri": f"{receiver.url}/labmon?lab=1"}
    values |= {name: posted.headers[name.title()] for name in ("content-type", "content-digest", "idempotency-key")}
    base = "\n".join([*(f'"{name}": {values[name]}' for name in SIGNED), f'"@signature-params": {parameters}'])
    signature = base64.b64decode(posted.headers["Signature"].removeprefix(f"{label}=:").removesuffix(":"))
    load_pem_public_key(webhook_key()[1].encode()).verify(signature, base.encode())


@pytest.mark.parametrize("change", [
    {"body": b'{"event": 8}'},
    {"url": "http://elsewhere.example/labmon?lab=1"},
    {"method": "PUT"},
    {"headers": {"Idempotency-Key": '"another"'}},
    {"headers": {"Content-Type": "text/plain"}},
], ids=lambda change: next(iter(change)))
def test_what_was_tampered_with_is_refused(receiver, hook, change):
    tell(hook)
    send_waiting()
    posted = receiver.got[0]
    if "headers" in change:
        change = {"headers": posted.headers | change["headers"]}
    with pytest.raises(InvalidSignature):
        verify(as_received(receiver, posted, **change))


def test_another_key_is_not_believed(receiver, hook):
    tell(hook)
    send_waiting()
    posted = receiver.got[0]
    old_id = webhook_key()[0]
    renew_key(KeyPurpose.WEBHOOK, by=None)
    assert webhook_key()[0] != old_id
    with pytest.raises((InvalidSignature, AssertionError)):
        verify(as_received(receiver, posted))
    tell(hook, "event-8-alarm")
    send_waiting()
    assert verify(as_received(receiver, receiver.got[1]))


def test_a_receiver_that_fails_and_hangs_is_tried_again_under_the_same_id(receiver, hook, monkeypatch):
    monkeypatch.setattr(post, "TIMEOUT_S", 0.2)
    receiver.answers = [500, 30.0, 302, 404]
    tell(hook)
    for _ in range(5):
        send_waiting()
        due()
    tries = list(DeliveryTry.objects.order_by("pk"))
    assert [one.is_handed_over for one in tries] == [False, False, False, False, True]
    assert "500" in tries[0].said and "Timeout" in tries[1].said and "302" in tries[2].said
    assert len({one.headers["Idempotency-Key"] for one in receiver.got}) == 1
    assert Delivery.objects.get().sent_at and send_waiting() == 0


def test_gone_is_gone_and_an_ended_hook_is_posted_nothing(receiver, hook):
    receiver.answers = [410]
    tell(hook)
    send_waiting()
    assert Delivery.objects.get().gave_up_at
    tell(hook, "event-8-alarm")
    end_webhook(hook.pk, by=None)
    send_waiting()
    assert len(receiver.got) == 1 and Delivery.objects.filter(gave_up_at=None).count() == 0


def test_one_that_fails_holds_up_neither_its_own_next_nor_the_mails(receiver, hook, monkeypatch, mailoutbox):
    """Of five messages to a hook that hangs one is tried; the mail is out before it."""
    monkeypatch.setattr(post, "TIMEOUT_S", 0.2)
    receiver.answers = [30.0] * 5
    for number in range(5):
        tell(hook, f"event-{number}-alarm")
    queue_mail("e", ["asha@lab.example"], "s", "b")
    assert send_waiting() == 1 and len(mailoutbox) == 1 and len(receiver.got) == 1
