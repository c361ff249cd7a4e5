"""People's keys for the API: shown once, kept as a digest."""

import secrets
from datetime import datetime
from hashlib import sha256

from django.db import transaction
from django.db.models import Q
from django.utils import timezone

from labmon.audit.actions import note
from labmon.errors import WriteError
from labmon.people.models import KeyScope, Person, PersonKey
from labmon.people.rights import has_access

PREFIX = "person-"


def digest_of(key: str) -> bytes:
    """SHA-256 of a key. A key has 256 random bits, so one round is enough: there is nothing to guess at."""
    return sha256(key.encode()).digest()


@transaction.atomic
def make_person_key(
    person: Person, *, by: Person | None, expires_at: datetime | None = None, scope: str = KeyScope.WRITE, purpose: str = ""
) -> tuple[PersonKey, str]:
    """A new key and its row; the key is returned this once and cannot be shown again.

    Raises:
        WriteError: The scope is not known, the key would be over before it begins, or the purpose is too long.
    """
    if scope not in KeyScope.values:
        raise WriteError("scope", f"{scope!r} is no scope.", f"Use one of {', '.join(KeyScope.values)}.")
    if len(purpose) > 100 or "\x00" in purpose:
        raise WriteError("purpose", "The purpose is too long.", "Say it in 100 characters.")
    key = PREFIX + secrets.token_urlsafe(32)
    row = PersonKey.objects.create(
        person=person, digest=digest_of(key), hint=key[-4:], expires_at=expires_at, scope=scope, purpose=purpose.strip()
    )
    note(by, "make person key", person,
         after={"key": row.pk, "hint": row.hint, "expires_at": expires_at, "scope": str(scope), "purpose": row.purpose})
    return row, key


@transaction.atomic
def revoke_person_key(key_id: int, *, by: Person | None) -> None:
    """End a key now; a second time changes nothing."""
    row = PersonKey.objects.select_for_update(of=("self",)).select_related("person").get(pk=key_id)
    if row.revoked_at is None:
        row.revoked_at = timezone.now()
        row.save(update_fields=["revoked_at"])
        note(by, "revoke person key", row.person, after={"key": row.pk, "hint": row.hint})


def person_of_key(key: str) -> Person | None:
    """Whose key this is; None if unknown, revoked, expired, or the person's access is over."""
    row = live_key(key)
    return row.person if row else None


def live_key(key: str) -> PersonKey | None:
    """The key's row with its person; None if unknown, revoked, expired, or the person's access is over."""
    now = timezone.now()
    row = (
        PersonKey.objects.select_related("person")
        .filter(Q(expires_at=None) | Q(expires_at__gt=now), digest=digest_of(key), revoked_at=None)
        .first()
    )
    return row if row and has_access(row.person) else None
