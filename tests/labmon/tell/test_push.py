"""Web Push: real encryption to a real local endpoint, opened again as the browser does; the published example of RFC 8291."""

import base64
import json

import http_ece
import pytest
from cryptography.hazmat.primitives.asymmetric.ec import SECP256R1, derive_private_key, generate_private_key
from cryptography.hazmat.primitives.serialization import Encoding, PublicFormat
from django.utils import timezone
from py_vapid import Vapid02

from labmon.errors import WriteError
from labmon.tell.actions import add_device
from labmon.tell.keys import push_public, renew_key
from labmon.tell.models import Delivery, KeyPurpose, PushDevice
from labmon.tell.outbox import Telling, queue
from labmon.tell.push import MOST_BYTES, encrypted, notification, unpacked
from labmon.tell.sending import send_waiting
from tests.factories import make_person
from tests.labmon.tell.servers import http_receiver

pytestmark = pytest.mark.django_db


def packed(octets):
    return base64.urlsafe_b64encode(octets).decode().rstrip("=")


def key_of(text):
    return derive_private_key(int.from_bytes(unpacked(text), "big"), SECP256R1())


class Browser:
    """What a browser keeps of a subscription."""

    def __init__(self, url):
        self.private, self.auth = generate_private_key(SECP256R1()), bytes(range(16))
        point = self.private.public_key().public_bytes(Encoding.X962, PublicFormat.UncompressedPoint)
        self.subscription = {"endpoint": url, "p256dh": packed(point), "auth": packed(self.auth)}

    def opened(self, body):
        return json.loads(http_ece.decrypt(body, private_key=self.private, auth_secret=self.auth, version="aes128gcm"))


@pytest.fixture
def service(settings):
    settings.PUSH_LOCAL = True
    with http_receiver() as service:
        yield service


def test_the_example_of_rfc_8291():
    """RFC 8291, section 5 and appendix A: keys, salt and body from memory of the RFC; a wrong digit would not decrypt."""
    body = encrypted(
        b"When I grow up, I want to be a watermelon",
        "BCVxsr7N_eNgVRqvHtD0zTZsEc6-VV-JvLexhqUzORcxaOzi6-AYWXvTBHm4bjyPjs7Vd8pZGH6SRpkNtoIAiw4",
        "BTBZMqHH6r4Tts7J_aSIgg",
        salt=unpacked("DGv6ra1nlYgDCS1FRnbzlw"),
        sender=key_of("yfWPiYE-n46HLnH0KqZOF1fJJU3MYrct3AELtAQ-oRw"),
    )
    assert packed(body) == (
        "DGv6ra1nlYgDCS1FRnbzlwAAEABBBP4z9KsN6nGRTbVYI_c7VJSPQTBtkgcy27mlmlMoZIIgDll6e3vCYLocInmYWAmS6TlzAC8wEqKK6PBru3jl7A_"
        "yl95bQpu6cVPTpK4Mqgkf1CXztLVBSt2Ks3oZwbuwXPXLWyouBWLVWGNWQexSgSxsj_Qulcy4a-fN"
    )


def test_only_the_browser_can_read_it_and_the_service_knows_who_asked(service):
    person, browser = make_person(email="asha@lab.example"), Browser(f"{service.url}/push/1")
    device = add_device(person, **browser.subscription, name="my phone")
    text = {"subject": "alarm: ER is low", "body": "First.\n\nSecond.\n\nThird.", "path": "/events/7/"}
    queue([Telling(key="event-7", person=person, **text)])
    assert send_waiting() == 2
    (posted,) = service.got
    said = browser.opened(posted.body)
    assert (said["title"], said["path"], said["text"]) == ("alarm: ER is low", "/events/7/", "First.\n\nSecond.")
    assert b"ER is low" not in posted.body
    assert {"Ttl", "Urgency", "Topic"} <= {name.title() for name in posted.headers}
    assert posted.headers["Content-Encoding"] == "aes128gcm" and len(posted.headers["Topic"]) <= 32
    authorization = posted.headers["Authorization"]
    assert Vapid02.verify(authorization) and f"k={push_public(device.key)}" in authorization
    claims = json.loads(unpacked(authorization.split("t=")[1].split(".")[1]))
    assert claims["aud"] == service.url and claims["exp"] > timezone.now().timestamp()


@pytest.mark.parametrize("status", [404, 410])
def test_a_subscription_that_is_over_ends_the_device(service, status):
    person = make_person(email="")
    add_device(person, **Browser(f"{service.url}/push/1").subscription, name="old phone")
    service.answers = [status]
    queue([Telling(key="event-7", person=person, subject="s", body="b")])
    send_waiting()
    assert PushDevice.objects.get().ended_at and Delivery.objects.get(channel="push").gave_up_at
    queue([Telling(key="event-8", person=person, subject="s", body="b")])
    assert not Delivery.objects.filter(message__key="event-8", channel="push").exists()


def test_a_service_that_is_busy_gets_it_later(service):
    person = make_person(email="asha@lab.example")
    add_device(person, **Browser(f"{service.url}/push/1").subscription, name="phone")
    service.answers = [429, 503]
    queue([Telling(key="event-7", person=person, subject="s", body="b")])
    for _ in range(3):
        send_waiting()
        Delivery.objects.update(next_try_at=timezone.now())
    topics = {one.headers["Topic"] for one in service.got}
    assert len(service.got) == 3 and len(topics) == 1, "a push service shows the last of one topic only"
    assert Delivery.objects.get(channel="push").sent_at


def test_devices_keep_the_key_they_subscribed_with(service):
    person = make_person(email="")
    before = add_device(person, **Browser(f"{service.url}/push/1").subscription, name="old").key
    renew_key(KeyPurpose.PUSH, by=None)
    after = add_device(person, **Browser(f"{service.url}/push/2").subscription, name="new").key
    queue([Telling(key="event-7", person=person, subject="s", body="b")])
    assert send_waiting() == 2 and before != after
    sent = {one.path[-1]: one.headers["Authorization"] for one in service.got}
    assert push_public(before) in sent["1"] and push_public(after) in sent["2"]


def test_what_is_too_long_is_cut_to_what_services_take():
    assert len(notification("t" * 250, "γ" * 5000, "/events/7/", "key")) <= MOST_BYTES
    assert json.loads(notification("γ" * 250, "γ" * 600, "/events/7/", "key"))["title"] == "γ" * 250


@pytest.mark.parametrize(("change", "field"), [
    ({"endpoint": "http://127.0.0.1:6379/"}, "endpoint"), ({"endpoint": "no address"}, "endpoint"), ({"p256dh": "AA"}, "p256dh"),
    ({"auth": "not base64!"}, "auth")])
def test_what_is_no_subscription_is_refused(change, field):
    good = Browser("https://push.example/1").subscription
    with pytest.raises(WriteError) as fault:
        add_device(make_person(), **(good | change), name="x")
    assert fault.value.field == field


def test_an_endpoint_inside_the_lab_is_not_posted_to(settings):
    """Whoever signs in could else have labmon post to any machine of the lab's network."""
    person = make_person(email="")
    add_device(person, **Browser("https://localhost:9/1").subscription, name="x")
    queue([Telling(key="event-7", person=person, subject="s", body="b")])
    assert send_waiting() == 0
    row = Delivery.objects.get(channel="push")
    assert row.gave_up_at and "not an address on the internet" in row.last_error
