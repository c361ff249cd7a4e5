"""Which runs there are: now, in a span, of an experiment."""

from collections.abc import Iterable
from datetime import datetime

from django.db.models import DateTimeField, QuerySet
from django.db.models.functions import Coalesce
from django.utils import timezone

from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.people.rights import experiments_visible_to
from labmon.runs.models import Run

_OVER_AT = Coalesce("ended_at", "ends_at", output_field=DateTimeField())


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
