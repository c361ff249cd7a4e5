"""Reading the audit: managers all of it, owners what is about their benches and experiments. What a page costs does not grow."""

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime

from django.db.models import Q

from labmon.audit.models import AuditEntry, AuditPlace
from labmon.people.models import Person, Role
from labmon.people.rights import has_access, role_of

#: Entries get their numbers a little before their times are known: so far may the two orders differ.
_SLACK = 1000
_PAGE = 1000


@dataclass(frozen=True, slots=True, kw_only=True)
class AuditWish:
    """Which entries; what is empty narrows nothing. ``person`` and ``action`` are names as the entries have them."""

    bench: str = ""
    subject: str = ""
    person: str = ""
    action: str = ""
    from_at: datetime | None = None
    until_at: datetime | None = None


def may_read_audit(person: Person) -> bool:
    """Owners (their own) and managers."""
    return has_access(person) and role_of(person) in {Role.OWNER, Role.MANAGER}


def audit_rows(
    person: Person, *, subject: str | None = None, before_id: int | None = None, limit: int = 100, wish: AuditWish | None = None
) -> list[AuditEntry]:
    """Newest first; ``before_id`` pages on."""
    asked = wish or AuditWish(subject=subject or "")
    if not may_read_audit(person):
        return []
    if role_of(person) is Role.MANAGER and not asked.bench:
        return list(AuditEntry.objects.filter(_asked_for(asked, before_id)).order_by("-pk")[:limit])
    places = own_places(person) if not asked.bench else [f"station/{asked.bench}"] if _sees_bench(person, asked.bench) else []
    return _of_places(asked, places, before_id, limit)


def audit_export(person: Person, wish: AuditWish, until_id: int) -> Iterator[AuditEntry]:
    """All of them up to ``until_id``, newest first, a page at a time."""
    before = until_id + 1
    while page := audit_rows(person, wish=wish, before_id=before, limit=_PAGE):
        yield from page
        before = page[-1].pk


def newest_id() -> int:
    """The number of the newest entry, 0 where there is none."""
    return AuditEntry.objects.order_by("-pk").values_list("pk", flat=True).first() or 0


def own_places(person: Person) -> list[str]:
    """Benches and experiments that someone owns."""
    benches = person.benches.order_by("station__name").values_list("station__name", flat=True)
    experiments = person.experiments.order_by("pk").values_list("pk", flat=True)
    return [*(f"station/{name}" for name in benches), *(f"experiment/{pk}" for pk in experiments)]


def _sees_bench(person: Person, bench: str) -> bool:
    return role_of(person) is Role.MANAGER or person.benches.filter(station__name=bench).exists()


def _of_places(wish: AuditWish, places: list[str], before_id: int | None, limit: int) -> list[AuditEntry]:
    """The newest of each place, then the newest of these: a step along one index for each place."""
    found: set[int] = set()
    asked = _asked_for(wish, before_id, of="entry__")
    for place in places:
        about = AuditPlace.objects.filter(asked, place=place).order_by("-entry_id")
        found.update(about.values_list("entry_id", flat=True)[:limit])
    return list(AuditEntry.objects.filter(pk__in=sorted(found, reverse=True)[:limit]).order_by("-pk"))


def _asked_for(wish: AuditWish, before_id: int | None, *, of: str = "") -> Q:
    """As a condition on entries, or on what points ``of`` them."""
    number = f"{of}pk" if not of else "entry_id"
    asked = Q() if before_id is None else Q(**{f"{number}__lt": before_id})
    for field, value in (("subject", wish.subject), ("person_name", wish.person), ("action", wish.action)):
        if value:
            asked &= Q(**{f"{of}{field}": value})
    if wish.from_at is not None:
        first = AuditEntry.objects.filter(at__gte=wish.from_at).order_by("at").values_list("pk", flat=True).first()
        asked &= Q(**{f"{of}at__gte": wish.from_at, f"{number}__gte": 0 if first is None else first - _SLACK})
    if wish.until_at is not None:
        last = AuditEntry.objects.filter(at__lt=wish.until_at).order_by("-at").values_list("pk", flat=True).first()
        asked &= Q(**{f"{of}at__lt": wish.until_at, f"{number}__lte": 0 if last is None else last + _SLACK})
    return asked
