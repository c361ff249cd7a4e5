"""Who is told of an alarm, one after the other (docs/decisions/0061-who-is-told.md).

In a declared run: its owner, its deputy, who is on call, the experiment's owner, the managers. Else: the experiment's owner, who
is on call, the managers. Whoever has no way to be reached, or whose account has ended, is left out. Quiet hours count for
everybody but the people of a run and whoever is on call.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime

from labmon.alarms.models import Alarm
from labmon.events.models import OnCall
from labmon.events.quiet import quiet_until
from labmon.people.models import Person, Role
from labmon.people.rights import has_access
from labmon.runs.models import Run
from labmon.runs.queries import runs_now
from labmon.tell.models import PushDevice, QuietHours

RUN_OWNER, DEPUTY, ON_CALL, OWNER, MANAGER, DRILLED = "run owner", "deputy", "on call", "owner", "manager", "drilled"
NOBODY = "nobody else could be reached"


@dataclass(frozen=True, slots=True)
class Told:
    """Someone to be told, as what, and until when they are not to be called (None: now). ``person`` None: the lab's mailbox."""

    person: Person | None
    duty: str
    quiet_until: datetime | None = None


Rung = list[Told]


def first_of(chain: list[Rung]) -> Rung:
    """Who is told first: the first rung that may be called now; where all sleep the first one, when they wake."""
    for rung in chain:
        awake = [one for one in rung if one.quiet_until is None]
        if awake:
            return awake
    return chain[0] if chain else [Told(None, NOBODY)]


def next_of(chain: list[Rung], told: set[int]) -> Rung:
    """Who is told next: the first rung with someone who may be called now and was not told yet; empty at its end."""
    for rung in chain:
        left = [one for one in rung if one.quiet_until is None and one.person and one.person.pk not in told]
        if left:
            return left
    return []


def chains_of(alarms: Iterable[Alarm], at: datetime) -> dict[int, list[Rung]]:
    """The chain of each alarm (with experiment and its owner loaded), by alarm id; a fixed number of queries."""
    given = list(alarms)
    experiments = {alarm.experiment_id for alarm in given if alarm.experiment_id}
    runs = runs_now(experiments, at) if experiments else {}
    on_call = [one.person for one in OnCall.objects.select_related("person").filter(from_at__lte=at, until_at__gt=at)]
    managers = list(Person.objects.filter(role=Role.MANAGER, is_active=True).order_by("pk"))
    known = _Known.of(_all_people(given, runs, on_call, managers), at)
    return {alarm.pk: _chain(alarm, runs.get(alarm.experiment_id or 0), on_call, managers, known) for alarm in given}


@dataclass(frozen=True, slots=True)
class _Known:
    reachable: set[int]
    quiet_until: dict[int, datetime | None]

    @classmethod
    def of(cls, people: list[Person], at: datetime) -> "_Known":
        ids = {one.pk for one in people}
        with_device = set(PushDevice.objects.filter(person__in=ids, ended_at=None).values_list("person", flat=True))
        quiet = {one.pk: quiet_until(one, at) for one in QuietHours.objects.filter(pk__in=ids)}
        return cls({one.pk for one in people if has_access(one) and (one.email or one.pk in with_device)}, quiet)


def _all_people(alarms: list[Alarm], runs: dict[int, Run], on_call: list[Person], managers: list[Person]) -> list[Person]:
    people = [one for run in runs.values() for one in (run.owner, run.deputy)]
    people += [alarm.experiment.owner for alarm in alarms if alarm.experiment]
    return [one for one in (*people, *on_call, *managers) if one is not None]


def _chain(alarm: Alarm, run: Run | None, on_call: list[Person], managers: list[Person], known: _Known) -> list[Rung]:
    owner = alarm.experiment.owner if alarm.experiment else None
    if alarm.event is not None and alarm.event.is_drill:
        wanted: list[tuple[list[Person | None], str]] = [([owner], DRILLED)]
    elif run is not None:
        wanted = [([run.owner], RUN_OWNER), ([run.deputy], DEPUTY), (on_call, ON_CALL), ([owner], OWNER), (managers, MANAGER)]
    else:
        wanted = [([owner], OWNER), (on_call, ON_CALL), (managers, MANAGER)]
    chain: list[Rung] = []
    seen: set[int] = set()
    for people, duty in wanted:
        fresh = [one for one in people if one is not None and one.pk in known.reachable and one.pk not in seen]
        seen |= {one.pk for one in fresh}
        never_quiet = duty in (RUN_OWNER, DEPUTY, ON_CALL, DRILLED)
        rung = [Told(one, duty, None if never_quiet else known.quiet_until.get(one.pk)) for one in fresh]
        chain += [rung] if rung else []
    return chain
