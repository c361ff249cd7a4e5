"""Mail by SMTP, plain text."""

import smtplib
from hashlib import sha256

from django.conf import settings
from django.core.mail import EmailMessage

from labmon.tell.faults import SendFault
from labmon.tell.models import Delivery


def send_mail(delivery: Delivery) -> str:
    """Hand a mail to the mail server.

    Raises:
        SendFault: It did not take it.
    """
    message = delivery.message
    to = [address.strip() for address in delivery.address.split(",")]
    mail = EmailMessage(message.subject, message.body, to=to, headers=mail_headers(message.key))
    try:
        mail.send()
    except smtplib.SMTPRecipientsRefused as fault:
        is_final = all(500 <= code < 600 for code, _ in fault.recipients.values())
        raise SendFault(f"{type(fault).__name__}: {fault}", is_final=is_final) from fault
    except (OSError, smtplib.SMTPException, UnicodeError) as fault:
        raise SendFault(f"{type(fault).__name__}: {fault}") from fault
    return f"taken by the mail server {settings.EMAIL_HOST}"


def mail_headers(key: str) -> dict[str, str]:
    """The same message has the same Message-ID: one that a crash sent twice is recognised by the reader's program.

    ``Auto-Submitted`` (RFC 3834) keeps holiday programs from answering.
    """
    return {"Message-ID": f"<{message_id(key)}@labmon>", "Auto-Submitted": "auto-generated"}


def message_id(key: str) -> str:
    """The stable id of a message, 32 characters: of this lab and this reason to tell."""
    return sha256(f"{settings.PUBLIC_URL} {key}".encode()).hexdigest()[:32]
