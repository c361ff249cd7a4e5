"""The wish for a morning's mail."""

from django.db import transaction

from labmon.audit.actions import note as audit_note
from labmon.overnight.models import DigestWish
from labmon.people.models import Person


@transaction.atomic
def set_digest(person: Person, *, is_wanted: bool, by: Person | None) -> None:
    """Send ``person`` every night by mail from now on, or no longer; the same again changes nothing."""
    was_wanted = DigestWish.objects.filter(person=person).exists()
    if was_wanted == is_wanted:
        return
    if is_wanted:
        DigestWish.objects.create(person=person)
    else:
        DigestWish.objects.filter(person=person).delete()
    audit_note(by, "set morning mail", person, {"is_wanted": was_wanted}, {"is_wanted": is_wanted})


def wants_digest(person: Person) -> bool:
    """True if they asked for it."""
    return DigestWish.objects.filter(person=person).exists()
