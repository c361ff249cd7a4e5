"""The only writer of people: add, give a role, end access. Each write leaves its audit row."""

from collections.abc import Iterable
from datetime import datetime

from django.contrib.auth.password_validation import validate_password
from django.core.exceptions import ValidationError
from django.core.validators import validate_email
from django.db import IntegrityError, transaction
from django.utils import timezone

from ingest.models import Station
from labmon.audit.actions import note
from labmon.errors import WriteError
from labmon.people.holdings import holdings_of
from labmon.people.models import Person, PersonKey, Role


@transaction.atomic
def add_person(
    name: str,
    role: str,
    *,
    by: Person | None = None,
    password: str | None = None,
    email: str = "",
    guest_until: datetime | None = None,
    guest_stations: Iterable[Station] = (),
) -> Person:
    """A new account. Without password it can be used by key only."""
    person = Person(username=_checked_name(name), role=_checked_role(role), email=_checked_email(email), guest_until=guest_until)
    _set_checked_password(person, password)
    try:
        with transaction.atomic():
            person.save()
    except IntegrityError as fault:
        raise WriteError("name", f"There is already someone called {name}.", "Choose another name.") from fault
    person.guest_stations.set(guest_stations)
    note(
        by,
        "add person",
        person,
        after={"role": person.role, "guest_until": guest_until, "guest_stations": sorted(one.name for one in guest_stations)},
    )
    return person


@transaction.atomic
def set_role(person: Person, role: str, *, by: Person | None, reason: str = "") -> Person:
    """Change what someone may do; the last manager stays one."""
    locked = Person.objects.select_for_update().get(pk=person.pk)
    before, after = locked.role, _checked_role(role)
    if before == Role.MANAGER and after != Role.MANAGER:
        _keep_a_manager(locked)
    if before != after:
        locked.role = after
        locked.save(update_fields=["role"])
        note(by, "set role", locked, {"role": before}, {"role": after}, reason)
    return locked


@transaction.atomic
def set_guest(person: Person, stations: Iterable[Station], until: datetime | None, *, by: Person | None) -> Person:
    """Which benches a guest sees, and until when."""
    locked = Person.objects.select_for_update().get(pk=person.pk)
    before = {"guest_until": locked.guest_until, "guest_stations": sorted(locked.guest_stations.values_list("name", flat=True))}
    locked.guest_until = until
    locked.save(update_fields=["guest_until"])
    locked.guest_stations.set(stations)
    note(by, "set guest", locked, before, {"guest_until": until, "guest_stations": sorted(one.name for one in stations)})
    return locked


@transaction.atomic
def set_password(person: Person, password: str, *, by: Person | None) -> None:
    """A new password; sessions made with the old one end."""
    locked = Person.objects.select_for_update().get(pk=person.pk)
    _set_checked_password(locked, password)
    locked.save(update_fields=["password"])
    note(by, "set password", locked)


@transaction.atomic
def end_access(person: Person, *, by: Person | None, reason: str = "") -> Person:
    """Sessions and keys are dead at once; the account and its audit rows stay.

    Raises:
        WriteError: The last manager; or something would be nobody's (``leaving.leave`` passes it on first).
    """
    locked = Person.objects.select_for_update().get(pk=person.pk)
    if locked.is_active and (held := holdings_of(locked)):
        names = ", ".join(f"{one.kind} {one.name}" for one in held[:8])
        raise WriteError("to", f"Nobody would have: {names}.", "Choose for each who takes it over.")
    if locked.role == Role.MANAGER and locked.is_active:
        _keep_a_manager(locked)
    if locked.is_active:
        locked.is_active = False
        locked.set_unusable_password()  # changes the session hash, so that open sessions end too
        locked.save(update_fields=["is_active", "password"])
        ended = PersonKey.objects.filter(person=locked, revoked_at=None).update(revoked_at=timezone.now())
        note(by, "end access", locked, {"is_active": True}, {"is_active": False, "keys_ended": ended}, reason)
    return locked


def _keep_a_manager(leaving: Person) -> None:
    managers = Person.objects.select_for_update().filter(role=Role.MANAGER, is_active=True).order_by("pk")
    if {one.pk for one in managers} <= {leaving.pk}:
        raise WriteError("role", f"{leaving.username} is the last manager.", "Make someone else manager first.")


def _checked_name(name: str) -> str:
    try:
        Person.username_validator(name)
    except ValidationError as fault:
        raise WriteError("name", " ".join(fault.messages), "Choose a name such as maren.") from fault
    if len(name) > 150:
        raise WriteError("name", "The name is longer than 150 characters.", "Choose a shorter one.")
    return name


def _checked_role(role: str) -> str:
    if role not in Role.values:
        raise WriteError("role", f"{role!r} is no role.", f"Use one of {', '.join(Role.values)}.")
    return role


def _checked_email(email: str) -> str:
    try:
        if email:
            validate_email(email)
    except ValidationError as fault:
        raise WriteError("email", f"{email!r} is no mail address.", "Write it as name@host, or leave it empty.") from fault
    return email


def _set_checked_password(person: Person, password: str | None) -> None:
    if password is None:
        person.set_unusable_password()
        return
    try:
        validate_password(password, person)
    except ValidationError as fault:
        raise WriteError("password", " ".join(fault.messages), "Choose a longer one.") from fault
    person.set_password(password)
