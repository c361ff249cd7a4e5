"""Beginning a drill: by a manager, or once a week by the beat."""

from datetime import datetime, timedelta

from django.db import IntegrityError, transaction
from django.utils import timezone

from labmon.audit.actions import note
from labmon.drills.models import Drill
from labmon.errors import WriteError
from labmon.events.queries import on_call_between
from labmon.events.telling import call_rules
from labmon.people.models import Person, Role
from labmon.people.rights import has_access


@transaction.atomic
def begin_drill(person: Person, *, by: Person | None, week: str | None = None) -> Drill:
    """A drill of ``person``; the worker sends the false drop within some seconds.

    Raises:
        WriteError: The account has ended, or a drill of this person is under way.
    """
    if not has_access(person) or person.role == Role.GUEST:
        raise WriteError("person", f"{person.username} is nobody to be called.", "Choose somebody who works here.")
    try:
        with transaction.atomic():
            drill = Drill.objects.create(
                person=person, person_name=person.username, asked_by=by, week=week, begun_at=timezone.now()
            )
    except IntegrityError as fault:
        raise WriteError("person", f"A drill of {person.username} is under way.", "Wait until it is over.") from fault
    note(by, "begin drill", person, after={"drill": drill.pk, "week": week}, as_name="labmon" if week else "command line")
    return drill


def begin_weekly_drill(now: datetime | None = None) -> Drill | None:
    """The week's drill, if it is switched on and its hour has come: of who is on call, else of the first manager."""
    clock, rules = now or timezone.now(), call_rules()
    if rules.drill_weekday != clock.weekday() or rules.drill_hour != clock.hour:
        return None
    year, week, _ = clock.isocalendar()
    name = f"{year}-W{week:02d}"
    if Drill.objects.filter(week=name).exists():
        return None
    on_call = [one.person for one in on_call_between(clock, clock + timedelta(seconds=1))]
    managers = Person.objects.filter(role=Role.MANAGER, is_active=True).order_by("pk")
    person = on_call[0] if on_call else managers.first()
    if person is None:
        return None
    try:
        return begin_drill(person, by=None, week=name)
    except WriteError:  # another beat was faster, or a drill of this person is under way
        return None
