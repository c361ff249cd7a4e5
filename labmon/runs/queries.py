"""Which runs there are: now, in a span, of an experiment."""

from collections.abc import Iterable
from datetime import datetime
from enum import StrEnum

from django.db.models import DateTimeField, Q, QuerySet
from django.db.models.functions import Coalesce
from django.utils import timezone

from ingest.times import YEAR_10000_US, at_of, us_of
from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.people.rights import experiments_visible_to
from labmon.runs.models import Run

LATEST_US, LARGEST_ID = YEAR_10000_US - 1, 2**63 - 1
_OVER_AT = Coalesce("ended_at", "ends_at", output_field=DateTimeField())


class RunState(StrEnum):
    """Where a run stands."""

    PLANNED = "planned"
    RUNNING = "running"
    OVER = "over"
    CANCELLED = "cancelled"


def state_of_run(run: Run, now: datetime) -> RunState:
    """Where it stands at a moment."""
    if run.cancelled_at:
        return RunState.CANCELLED
    if run.starts_at > now:
        return RunState.PLANNED
    return RunState.RUNNING if run.over_at > now else RunState.OVER


def in_state(rows: QuerySet[Run], state: RunState, now: datetime) -> QuerySet[Run]:
    """Those of the runs that stand so."""
    if state is RunState.CANCELLED:
        return rows.exclude(cancelled_at=None)
    found = rows.filter(cancelled_at=None).annotate(over=_OVER_AT)
    if state is RunState.PLANNED:
        return found.filter(starts_at__gt=now)
    begun = found.filter(starts_at__lte=now)
    return begun.filter(over__gt=now) if state is RunState.RUNNING else begun.filter(over__lte=now)


def run_page(rows: QuerySet[Run], before: str, count: int) -> tuple[list[Run], str | None]:
    """``count`` runs, latest start first, behind the key ``before`` ("" is the beginning), and the key of the next page.

    A key is the start in µs and the id of a page's last run; one that is none leads to the first page.
    """
    loaded = rows.select_related("experiment", "owner", "deputy", "planned_by").prefetch_related("taps__station")
    start_us, _, number = before.partition("-")
    if start_us.isascii() and start_us.isdigit() and number.isascii() and number.isdigit() and len(before) < 40:
        at = at_of(min(int(start_us), LATEST_US))
        loaded = loaded.filter(Q(starts_at__lt=at) | Q(starts_at=at, pk__lt=min(int(number), LARGEST_ID)))
    found = list(loaded.order_by("-starts_at", "-pk")[: count + 1])
    has_more = len(found) > count
    found = found[:count]
    return found, f"{us_of(found[-1].starts_at)}-{found[-1].pk}" if has_more else None


def declared_runs() -> QuerySet[Run]:
    """Runs that were not cancelled, each with its ``over`` time, as the database can ask for it."""
    return Run.objects.filter(cancelled_at=None).annotate(over=_OVER_AT)


def runs_visible_to(person: Person) -> QuerySet[Run]:
    """Runs, cancelled ones too, of the experiments that ``person`` may see."""
    return Run.objects.filter(experiment__in=experiments_visible_to(person))


def run_now(experiment: Experiment, at: datetime | None = None) -> Run | None:
    """The run that is under way (at ``at``, else now), or None."""
    return runs_now([experiment.pk], at).get(experiment.pk)


def runs_now(experiments: Iterable[int], at: datetime | None = None) -> dict[int, Run]:
    """Runs under way by experiment id, of the experiments (ids or rows); one query."""
    at = at or timezone.now()
    found = declared_runs().filter(experiment__in=_ids(experiments), starts_at__lte=at, over__gt=at)
    return {run.experiment_id: run for run in found.select_related("owner", "deputy")}


def runs_between(from_at: datetime, until_at: datetime, experiments: Iterable[int] | None = None) -> list[Run]:
    """Runs that overlap a half-open span, by start; of the experiments (ids or rows) or of all; one query."""
    found = declared_runs().filter(starts_at__lt=until_at, over__gt=from_at)
    if experiments is not None:
        found = found.filter(experiment__in=_ids(experiments))
    return list(found.select_related("experiment", "owner", "deputy").order_by("starts_at", "pk"))


def declared_taps(from_at: datetime, until_at: datetime, tap_ids: Iterable[int]) -> list[tuple[int, int, datetime, datetime]]:
    """(experiment id, tap id, start, end) of runs that rely on the taps and touch the closed span; one query."""
    found = declared_runs().filter(starts_at__lte=until_at, over__gt=from_at, run_taps__tap__in=list(tap_ids))
    return list(found.values_list("experiment_id", "run_taps__tap_id", "starts_at", "over"))


def _ids(experiments: Iterable[int | Experiment]) -> list[int]:
    return [one if isinstance(one, int) else one.pk for one in experiments]
