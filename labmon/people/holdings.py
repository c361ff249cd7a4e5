"""What hangs on a person: benches, experiments with their limits and alarms, runs ahead, times on call."""

from dataclasses import dataclass
from enum import StrEnum

from django.db.models import Count, Q
from django.utils import timezone

from labmon.benches.models import Bench
from labmon.events.models import OnCall
from labmon.experiments.models import Experiment
from labmon.people.models import Person, Role
from labmon.runs.models import Run


class HoldingKind(StrEnum):
    BENCH = "bench"
    EXPERIMENT = "experiment"
    RUN = "run"
    DEPUTY = "deputy"
    ON_CALL = "on-call"


#: Roles that can take it over: an owner's rights on a bench are an owner's or a manager's only.
ROLES_FOR = {
    HoldingKind.BENCH: frozenset({Role.OWNER, Role.MANAGER}),
    HoldingKind.EXPERIMENT: frozenset({Role.OWNER, Role.MANAGER}),
    HoldingKind.RUN: frozenset({Role.RESEARCHER, Role.OWNER, Role.MANAGER}),
    HoldingKind.DEPUTY: frozenset({Role.RESEARCHER, Role.OWNER, Role.MANAGER}),
    HoldingKind.ON_CALL: frozenset({Role.RESEARCHER, Role.OWNER, Role.MANAGER}),
}


@dataclass(frozen=True, slots=True)
class Holding:
    """One thing that needs somebody; ``key`` names it in forms, ``more`` says what goes with it."""

    kind: HoldingKind
    number: int
    name: str
    more: str = ""

    @property
    def key(self) -> str:
        """``bench-7``."""
        return f"{self.kind}-{self.number}"


def holdings_of(person: Person) -> list[Holding]:
    """All of it, in a fixed number of queries; runs and times on call only where they are not over."""
    now = timezone.now()
    benches = Bench.objects.filter(owner=person).select_related("station").order_by("station__name")
    experiments = (
        Experiment.objects.filter(owner=person)
        .annotate(limit_count=Count("limits", distinct=True),
                  open_alarms=Count("alarms", filter=Q(alarms__returned_at=None, alarms__is_withdrawn=False), distinct=True))
        .order_by("name")
    )
    ahead = Run.objects.filter(cancelled_at=None, ended_at=None, ends_at__gt=now).order_by("starts_at", "pk")
    duties = OnCall.objects.filter(person=person, until_at__gt=now).order_by("from_at")
    owned, seconded = ahead.filter(owner=person), ahead.filter(deputy=person)
    return [
        *(Holding(HoldingKind.BENCH, one.pk, one.station.name) for one in benches),
        *(Holding(HoldingKind.EXPERIMENT, one.pk, one.name, _counted(one.limit_count, one.open_alarms)) for one in experiments),
        *(Holding(HoldingKind.RUN, one.pk, one.name, _span(one.starts_at, one.ends_at)) for one in owned),
        *(Holding(HoldingKind.DEPUTY, one.pk, one.name, _span(one.starts_at, one.ends_at)) for one in seconded),
        *(Holding(HoldingKind.ON_CALL, one.pk, _span(one.from_at, one.until_at)) for one in duties),
    ]


def may_take(person: Person, kind: HoldingKind) -> bool:
    """Whether someone can take such a thing over."""
    role = Role.MANAGER if person.is_superuser else Role(person.role)
    return person.is_active and role in ROLES_FOR[kind]


def _counted(limits: int, open_alarms: int) -> str:
    counts = ((limits, "limit"), (open_alarms, "open alarm"))
    said = [f"{count} {word}{'s' if count != 1 else ''}" for count, word in counts if count]
    return f"with {' and '.join(said)}" if said else ""


def _span(from_at, until_at) -> str:
    return f"{from_at:%Y-%m-%d %H:%M} to {until_at:%Y-%m-%d %H:%M}"
