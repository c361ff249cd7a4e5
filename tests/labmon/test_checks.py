"""Each check speaks on its fault and is silent without it."""

from pathlib import Path

import pytest
from django.core.checks import run_checks

from ingest.mqtt.address import broker_address
from labmon.checks import CONSOLE_MAIL, is_this_machine

OPERATIONS = Path(__file__).resolve().parents[2] / "docs/operations.md"


@pytest.fixture
def sound(settings):
    """A lab behind a TLS proxy with mail."""
    settings.HAS_SERVICES = settings.IS_SECRET_KEY_KEPT = settings.IS_BEHIND_TLS = True
    settings.DEBUG = False
    settings.PUBLIC_URL = "https://lab.example"
    settings.ALLOWED_HOSTS = ["lab.example"]
    settings.LISTEN = "127.0.0.1"
    settings.EMAIL_BACKEND = "django.core.mail.backends.smtp.EmailBackend"
    return settings


def found():
    return {message.id for message in run_checks(include_deployment_checks=True) if message.id.startswith("labmon.")}


def test_sound_settings_are_silent(sound):
    assert found() == set()


@pytest.mark.parametrize(("name", "value", "ids"), [
    ("HAS_SERVICES", False, {"labmon.E001"}),
    ("PUBLIC_URL", "lab.example", {"labmon.E002"}),
    ("PUBLIC_URL", "https://lab.example/labmon", {"labmon.E002"}),
    ("PUBLIC_URL", "http://lab.example", {"labmon.W004"}),
    ("IS_BEHIND_TLS", False, {"labmon.W003"}),
    ("DEBUG", True, {"labmon.W001"}),
    ("EMAIL_BACKEND", CONSOLE_MAIL, {"labmon.W002"}),
    ("ALLOWED_HOSTS", ["*"], {"labmon.W005"}),
    ("IS_SECRET_KEY_KEPT", False, {"labmon.W007"}),
])
def test_each_fault_has_its_id(sound, name, value, ids):
    setattr(sound, name, value)
    assert found() == ids


@pytest.mark.parametrize(("url", "ids"), [
    ("mqtt://labmon.door:x@127.0.0.1", set()), ("mqtts://labmon.door:x@broker.example", set()),
    ("mqtt://labmon.door:x@broker.example", {"labmon.W008"}),
])
def test_an_mqtt_broker_elsewhere_wants_tls(sound, url, ids):
    sound.MQTT_BROKER = broker_address(url)
    assert found() == ids


def test_listening_without_tls(sound):
    sound.IS_BEHIND_TLS, sound.PUBLIC_URL, sound.LISTEN = False, "http://lab.example", "0.0.0.0"
    assert found() == {"labmon.W006"}


@pytest.mark.parametrize(("host", "answer"), [
    ("localhost", True), ("127.0.0.1", True), ("[::1]", True), ("demo.localhost", True),
    ("0.0.0.0", False), ("192.0.2.7", False), ("lab.example", False), ("*", False),
])
def test_this_machine(host, answer):
    assert is_this_machine(host) is answer


def test_operations_page_explains_every_id():
    page = OPERATIONS.read_text()
    source = (Path(__file__).resolve().parents[2] / "labmon/checks.py").read_text()
    import re

    ids = set(re.findall(r"labmon\.([EW]\d{3})", source))
    assert ids
    assert {number for number in ids if number not in page} == set()
