"""The lab's own signing keys: made at first use, kept in the database (and so in its backup), renewed by a command.

Ed25519 signs webhooks (RFC 9421, 3.3.6), P-256 says to push services who asks (RFC 8292).
"""

import base64
from typing import Final

from cryptography.hazmat.primitives.asymmetric.ec import SECP256R1, EllipticCurvePrivateKey, generate_private_key
from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey
from cryptography.hazmat.primitives.serialization import (
    Encoding,
    NoEncryption,
    PrivateFormat,
    PublicFormat,
    load_pem_private_key,
)
from django.db import transaction
from django.utils import timezone

from labmon.audit.actions import note
from labmon.claims import lock_name
from labmon.people.models import Person
from labmon.tell.models import KeyPurpose, SigningKey

_UNCOMPRESSED: Final = PublicFormat.UncompressedPoint


@transaction.atomic
def key_in_force(purpose: KeyPurpose) -> SigningKey:
    """The key that signs now; made where there is none yet."""
    found = SigningKey.objects.filter(purpose=purpose, retired_at=None).first()
    if found is not None:
        return found
    lock_name(f"signing-key-{purpose}")
    return SigningKey.objects.filter(purpose=purpose, retired_at=None).first() or _make(purpose)


@transaction.atomic
def renew_key(purpose: KeyPurpose, *, by: Person | None) -> SigningKey:
    """A new key takes over. Webhook receivers need its public half; devices keep the key that they subscribed with."""
    lock_name(f"signing-key-{purpose}")
    SigningKey.objects.filter(purpose=purpose, retired_at=None).update(retired_at=timezone.now())
    key = _make(purpose)
    note(by, "renew signing key", f"signing key/{key.pk}", after={"purpose": purpose, "key_id": key_id(key)})
    return key


def _make(purpose: KeyPurpose) -> SigningKey:
    private = Ed25519PrivateKey.generate() if purpose == KeyPurpose.WEBHOOK else generate_private_key(SECP256R1())
    pem = private.private_bytes(Encoding.PEM, PrivateFormat.PKCS8, NoEncryption()).decode()
    return SigningKey.objects.create(purpose=purpose, private_pem=pem)


def key_id(key: SigningKey) -> str:
    """The name under which receivers know it."""
    return f"labmon-{key.purpose}-{key.pk}"


def private_half(key: SigningKey) -> Ed25519PrivateKey | EllipticCurvePrivateKey:
    """The key itself."""
    return load_pem_private_key(key.private_pem.encode(), None)  # type: ignore[return-value]


def public_pem(key: SigningKey) -> str:
    """What a receiver checks signatures with."""
    return private_half(key).public_key().public_bytes(Encoding.PEM, PublicFormat.SubjectPublicKeyInfo).decode()


def push_public(key: SigningKey) -> str:
    """The P-256 point that a browser subscribes with (applicationServerKey), base64url."""
    point = private_half(key).public_key().public_bytes(Encoding.X962, _UNCOMPRESSED)
    return base64.urlsafe_b64encode(point).decode().rstrip("=")
