"""``manage.py renew_signing_key webhook|push``: a new key signs from now on."""

from argparse import ArgumentParser
from typing import Any

from labmon.management.base import LabCommand
from labmon.tell.keys import key_id, public_pem, push_public, renew_key
from labmon.tell.models import KeyPurpose


class Command(LabCommand):
    help = "Make a new key for signing webhooks, or for asking push services; prints its public half."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("purpose", choices=KeyPurpose.values)

    def handle(self, *args: Any, **wish: Any) -> str:
        purpose = KeyPurpose(wish["purpose"])
        key = renew_key(purpose, by=None)
        public = public_pem(key).strip() if purpose == KeyPurpose.WEBHOOK else push_public(key)
        return f"{key_id(key)}\n{public}"
