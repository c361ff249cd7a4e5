"""The only writer of the audit; call it in the transaction of the write it tells of."""

from datetime import datetime
from typing import Any

from django.db import transaction
from django.db.models import Model

from labmon.audit.models import AuditEntry, AuditPlace
from labmon.audit.places import places_of
from labmon.people.models import Person


def note(
    person: Person | None, action: str, subject: Model | str, before: Any = None, after: Any = None, reason: str = "",
    *, as_name: str = "command line",
) -> AuditEntry:
    """Write who did what to what. ``person`` is None for a command run at the machine itself, or for what ``as_name`` says.

    Raises:
        RuntimeError: Outside a transaction: the write and its audit row must stand or fall together.
    """
    if not transaction.get_connection().in_atomic_block:
        raise RuntimeError("note() must run in the transaction of the write it tells of")
    entry = AuditEntry.objects.create(
        person=person,
        person_name=person.username if person else as_name[:150],
        action=action,
        subject=subject if isinstance(subject, str) else name_of(subject),
        before=plain(before),
        after=plain(after),
        reason=reason,
    )
    if places := places_of(subject):
        AuditPlace.objects.bulk_create([AuditPlace(entry=entry, place=place) for place in places])
    return entry


@transaction.atomic
def note_export(action: str, subject: Model | str, facts: dict[str, Any], *, by: Person | None) -> AuditEntry:
    """That somebody takes data out; written before the first byte leaves."""
    return note(by, action, subject, after=facts)


def name_of(subject: Model) -> str:
    """How the audit names a row: ``station/b08``, ``tap/b08/eom-in``, ``experiment/3``, ``limit/7``, ``person/maren``."""
    kind = subject._meta.model_name
    if kind == "tap":
        return f"tap/{subject.station.name}/{subject.name}"
    if kind == "station":
        return f"station/{subject.name}"
    if kind == "person":
        return f"person/{subject.username}"
    return f"{kind}/{subject.pk}"


def plain(value: Any) -> Any:
    """Times as text, so that JSON can hold them."""
    if isinstance(value, dict):
        return {str(key): plain(one) for key, one in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(one) for one in value]
    return value.isoformat() if isinstance(value, datetime) else value
