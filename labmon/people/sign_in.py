"""Slowing down who guesses passwords: a pause that grows with each failed sign-in, by account name and by address.

Names are counted whether or not there is such an account, so that a pause gives nothing away. Only digests are kept.
"""

import ipaddress
import logging
import unicodedata
from dataclasses import dataclass
from datetime import datetime, timedelta
from hashlib import sha256
from typing import Final

from django.db import transaction
from django.utils import timezone

from labmon.people.models import SignInTry

log = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True)
class Patience:
    """So many failures are free; then each doubles the pause, up to the longest."""

    free: int
    first_s: float
    longest_s: float

    def pause_s(self, failures: int) -> float:
        """How long to wait after so many failures."""
        over = failures - self.free
        return 0.0 if over < 0 else min(self.first_s * 2.0 ** min(over, 30), self.longest_s)


#: Someone who mistypes is not held up; one guess a quarter of an hour is all that is left of an attack on one account.
OF_ACCOUNT: Final = Patience(free=5, first_s=5.0, longest_s=900.0)
#: A whole lab may stand behind one address.
OF_ADDRESS: Final = Patience(free=30, first_s=5.0, longest_s=900.0)
#: After so long without a failure all is forgotten.
FORGET: Final = timedelta(hours=24)


def begin_try(name: str, address: str, now: datetime | None = None) -> float:
    """Count a try before its password is looked at; seconds to wait where it must not be looked at yet, else 0.

    Counted first, so that tries side by side cannot slip through; a good one is taken back by ``note_success``.
    """
    at = now or timezone.now()
    SignInTry.objects.filter(last_at__lt=at - FORGET).delete()
    with transaction.atomic():
        rows = _locked(name, address, at)
        wait_s = max(((row.paused_until - at).total_seconds() for row, _ in rows if row.paused_until), default=0.0)
        if wait_s > 0.0:
            return wait_s
        for row, patience in rows:
            row.failures += 1
            row.last_at = at
            pause_s = patience.pause_s(row.failures)
            row.paused_until = at + timedelta(seconds=pause_s) if pause_s else None
            row.save(update_fields=["failures", "last_at", "paused_until"])
            if pause_s:
                log.warning("sign_in_paused", extra={"address": address, "failures": row.failures, "pause_s": pause_s})
    return 0.0


def note_success(name: str, address: str) -> None:
    """The password was right: the account starts anew, and the address is not charged for this one."""
    with transaction.atomic():
        SignInTry.objects.filter(mark=account_mark(name)).delete()
        row = SignInTry.objects.select_for_update().filter(mark=address_mark(address)).first()
        if row is not None:
            row.failures = max(row.failures - 1, 0)
            row.paused_until = None
            row.save(update_fields=["failures", "paused_until"])


def account_mark(name: str) -> bytes:
    """The same for names that look alike to people."""
    return sha256(b"account:" + unicodedata.normalize("NFKC", name).casefold().strip().encode()).digest()


def address_mark(address: str) -> bytes:
    """An IPv6 address counts by its network of 64 bits: one household has as many addresses as it likes."""
    try:
        seen = ipaddress.ip_address(address)
    except ValueError:
        return sha256(b"address:" + address.encode()).digest()
    whole = ipaddress.ip_network((seen, 64), strict=False) if seen.version == 6 else seen
    return sha256(f"address:{whole}".encode()).digest()


def _locked(name: str, address: str, at: datetime) -> list[tuple[SignInTry, Patience]]:
    """Both rows, locked in one order."""
    marks = {account_mark(name): OF_ACCOUNT, address_mark(address): OF_ADDRESS}
    SignInTry.objects.bulk_create([SignInTry(mark=mark, last_at=at) for mark in sorted(marks)], ignore_conflicts=True)
    rows = SignInTry.objects.select_for_update().filter(mark__in=list(marks)).order_by("mark")
    return [(row, marks[bytes(row.mark)]) for row in rows]
