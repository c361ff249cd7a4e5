"""What can be wrong with the settings only in combination; ``manage.py check --deploy`` and ``prepare_lab`` tell.

docs/operations.md says what each id means.
"""

import ipaddress
from collections.abc import Iterable
from typing import Any
from urllib.parse import urlsplit

from django.conf import settings
from django.core import checks
from django.core.checks import CheckMessage, Error, register

TAG = "labmon"
CONSOLE_MAIL = "django.core.mail.backends.console.EmailBackend"


def is_this_machine(host: str) -> bool:
    """Whether a host name or address means this machine only."""
    if host == "localhost" or host.endswith(".localhost"):
        return True
    try:
        return ipaddress.ip_address(host.strip("[]")).is_loopback
    except ValueError:
        return False


def has_public_host() -> bool:
    """Whether other machines are meant to reach the lab."""
    return not all(map(is_this_machine, settings.ALLOWED_HOSTS)) or not is_this_machine(settings.LISTEN)


@register(TAG, deploy=True)
def check_services(app_configs: Any, **kwargs: Any) -> Iterable[CheckMessage]:
    """E001: nobody said where database and broker are."""
    if not settings.HAS_SERVICES:
        yield Error(f"No database or broker is known, and no lab is running on {settings.DATA_DIR}.",
                    hint="Start manage.py run_lab, or set LABMON_DATABASE_URL and LABMON_BROKER_URL.", id="labmon.E001")


@register(TAG, deploy=True)
def check_public_url(app_configs: Any, **kwargs: Any) -> Iterable[CheckMessage]:
    """E002, W003, W004: the address in mails and links, and whether it agrees with the TLS proxy."""
    parts = urlsplit(settings.PUBLIC_URL)
    if parts.scheme not in {"http", "https"} or not parts.hostname or parts.path.strip("/"):
        yield Error(f"LABMON_PUBLIC_URL={settings.PUBLIC_URL!r} is not an address such as https://lab.example.",
                    hint="Write scheme and host (and port), without a path.", id="labmon.E002")
    elif parts.scheme == "https" and not settings.IS_BEHIND_TLS:
        yield checks.Warning("LABMON_PUBLIC_URL is https, but labmon does not know that a TLS proxy stands before it.",
                             hint="Set LABMON_BEHIND_TLS=1, so that cookies are sent over TLS only.", id="labmon.W003")
    elif parts.scheme == "http" and settings.IS_BEHIND_TLS:
        yield checks.Warning("LABMON_BEHIND_TLS is on, but LABMON_PUBLIC_URL is http: links in mails lead past TLS.",
                             hint="Set LABMON_PUBLIC_URL=https://….", id="labmon.W004")


@register(TAG, deploy=True)
def check_exposure(app_configs: Any, **kwargs: Any) -> Iterable[CheckMessage]:
    """W001, W005, W006: what strangers could see or read on the way."""
    if settings.DEBUG and has_public_host():
        yield checks.Warning("LABMON_DEBUG is on and other machines may reach the lab: error pages show settings and data.",
                             hint="Unset LABMON_DEBUG.", id="labmon.W001")
    if "*" in settings.ALLOWED_HOSTS:
        yield checks.Warning("LABMON_HOSTS=* answers under any name, so links can be forged.",
                             hint="Name the hosts under which browsers and stations reach the lab.", id="labmon.W005")
    if not is_this_machine(settings.LISTEN) and not settings.IS_BEHIND_TLS:
        yield checks.Warning(f"The lab listens on {settings.LISTEN} without TLS: keys and passwords can be read on the way.",
                             hint="Put a TLS proxy before it (docs/operations.md, 'TLS') and set LABMON_BEHIND_TLS=1, or keep "
                                  "to a network you trust.", id="labmon.W006")


@register(TAG, deploy=True)
def check_mail(app_configs: Any, **kwargs: Any) -> Iterable[CheckMessage]:
    """W002: alarms would be mailed to a log file."""
    if settings.EMAIL_BACKEND == CONSOLE_MAIL and urlsplit(settings.PUBLIC_URL).scheme == "https":
        yield checks.Warning("Mails are only written to the worker's log, and the lab has a public https address.",
                             hint="Set LABMON_MAIL_HOST (and user, password, TLS), so that alarms reach people.",
                             id="labmon.W002")


@register(TAG, deploy=True)
def check_secret_key(app_configs: Any, **kwargs: Any) -> Iterable[CheckMessage]:
    """W007: each process would sign sessions with a key of its own."""
    if not settings.IS_SECRET_KEY_KEPT:
        yield checks.Warning("There is no kept secret key: each process draws its own, and sign-ins do not last.",
                             hint="Set LABMON_SECRET_KEY to 50 random characters, or start once with manage.py run_lab.",
                             id="labmon.W007")


@register(TAG, deploy=True)
def check_mqtt(app_configs: Any, **kwargs: Any) -> Iterable[CheckMessage]:
    """W008: labmon's password for the MQTT broker goes over the network as it is."""
    broker = settings.MQTT_BROKER
    if broker is not None and not broker.is_tls and not is_this_machine(broker.host):
        yield checks.Warning(f"LABMON_MQTT_URL names {broker.host} without TLS: passwords and readings can be read on the way.",
                             hint="Write mqtts://, or keep to a network you trust (a container set's own is one).",
                             id="labmon.W008")
